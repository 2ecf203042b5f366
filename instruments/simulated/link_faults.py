"""Faults of the links, and of the relay in the supply: their names, and when each one strikes.

A fault is on while ``World.active("late-answer:meter")`` gives a value. How many answers it
spoils is counted here; giving the fault again, clearing the faults or inserting a board starts
the count anew, and so does a time in between in which it was not active.
"""

from __future__ import annotations

from dataclasses import dataclass

from instruments.simulated.errors import ScpiError
from instruments.simulated.world import World

INSTRUMENT_FAULTS = {
    "late-answer:*": "one answer comes late; value = seconds of the wall's time, 1 if not given",
    "lost-answer:*": "the next answers never come; value = how many, 1 if not given",
    "garbage:*": "the next answers are noise; value = how many, 1 if not given",
    "truncated:*": "the next answers stop half-way, no newline; value = how many, 1 if not given",
    "dropped-peer:*": "the connection closes instead of the answer; value = how often, 1 if none",
    "refused-port:*": "connections are closed and refused for as long as the fault is on",
    "queue-error:*": "a system error enters the queue before the next messages; value = how many",
    "wrong-identity:*": "*IDN? names another maker and model for as long as the fault is on",
    "stuck-output:*": "supply: the output does not switch off, and the read-back says so",
    "lying-output:*": "supply: the output does not switch off, and the read-back says it did",
}
"""Pattern -> what it does; the star stands for the instrument's name in the bench file."""

GARBAGE = b"\x15?%#~\xfe\x00\x7f!"


@dataclass(frozen=True, slots=True)
class Delivery:
    """What is to happen to one response: bytes to send (None: nothing), when, and then what."""

    payload: bytes | None
    delay_s: float = 0.0
    close: bool = False


class LinkFaults:
    """Decides about every response of one instrument; called with the world's lock held."""

    def __init__(self, world: World, name: str) -> None:
        self._world = world
        self._names = {
            kind: f"{kind}:{name}"
            for kind in (
                "late-answer", "lost-answer", "garbage", "truncated", "dropped-peer",
                "refused-port", "queue-error",
            )
        }  # fmt: skip
        self._spent: dict[str, int] = {}

    def rearm(self, fault: str | None = None) -> None:
        """Start the count of one fault anew, or that of every fault."""
        if fault is None:
            self._spent.clear()
        else:
            self._spent.pop(fault, None)

    def refused(self) -> bool:
        """True while nobody may connect."""
        return self._world.active(self._names["refused-port"]) is not None

    def queue_error(self) -> ScpiError | None:
        """The error that the next message finds in the queue."""
        if self._take("queue-error") is None:
            return None
        return ScpiError(-310, "simulated fault")

    def deliver(self, answer: str | None) -> Delivery:
        """Decide about one response; at most one fault strikes it, the others wait."""
        if self._take("dropped-peer") is not None:
            return Delivery(None, close=True)
        if answer is None:
            return Delivery(None)
        payload = answer.encode("latin-1", "replace") + b"\n"
        if self._take("lost-answer") is not None:
            return Delivery(None)
        delay = self._take("late-answer")
        if delay is not None:
            return Delivery(payload, delay_s=max(0.0, delay))
        if self._take("truncated") is not None:
            return Delivery(payload[: len(payload) // 2])
        if self._take("garbage") is not None:
            return Delivery(GARBAGE + b"\n")
        return Delivery(payload)

    def _take(self, kind: str) -> float | None:
        name = self._names[kind]
        value = self._world.active(name)
        if value is None:
            self._spent.pop(name, None)
            return None
        allowed = 1 if kind == "late-answer" else max(1, round(value))
        spent = self._spent.get(name, 0)
        if spent >= allowed:
            return None
        self._spent[name] = spent + 1
        return value
