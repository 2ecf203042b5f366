"""Everything that can go wrong between this program and an instrument, in one tree.

benchkit.errors.LinkError
└── ExchangeError              carries role, resource, command, waited_s, received
    ├── CannotOpen             the resource could not be opened (unknown host, bad name, no route)
    │   └── ConnectionRefused  the host is there, but nothing listens on the port
    ├── PeerClosed             the connection was open and has gone
    ├── NoAnswer               the peer is silent, or stopped in the middle of a line
    ├── TransportFault         the VISA layer reported something else
    ├── WrongInstrument        *IDN? was answered, but not as the bench file says
    ├── OutOfStep              an answer is missing or one too many is there: nothing may be asked
    ├── BadAnswer              a line came that cannot be the answer to what was asked
    │   └── BadNumber          a field that should be a number, a boolean or an entry is none
    ├── NotMeasured            a proper answer that says there is no value
    │   ├── Overload           9.9E37 or -9.9E37: outside the range
    │   └── NotANumber         9.91E37: nothing to measure (an open sensor, for instance)
    ├── InstrumentError        the instrument's error queue was not empty
    └── NotConfirmed           a setting was accepted, but reads back as something else

Errors of the layers below are translated into this tree once, in ``instruments/link.py``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Self

from benchkit.errors import LinkError

SHOWN_BYTES = 120


class ExchangeError(LinkError):
    """Base of the tree: what went wrong, with whom, at which command, and what to do about it.

    ``problem`` is the sentence without the circumstances; ``str()`` composes both. ``waited_s``
    is None and ``received`` empty where they do not apply.
    """

    advice = ""

    def __init__(
        self,
        problem: str,
        *,
        role: str = "",
        resource: str = "",
        command: str = "",
        waited_s: float | None = None,
        received: bytes = b"",
    ) -> None:
        super().__init__(problem)
        self.problem = problem
        self.role = role
        self.resource = resource
        self.command = command
        self.waited_s = waited_s
        self.received = received

    def place(
        self,
        *,
        role: str,
        resource: str,
        command: str,
        waited_s: float | None = None,
        received: bytes = b"",
    ) -> Self:
        """Fill in the circumstances that the layer which found the fault did not know."""
        self.role = self.role or role
        self.resource = self.resource or resource
        self.command = self.command or command
        self.waited_s = waited_s if self.waited_s is None else self.waited_s
        self.received = self.received or received
        return self

    def __str__(self) -> str:
        text = self.problem
        if self.role or self.resource:
            text = f"{self.role or 'instrument'} ({self.resource}): {text}"
        facts = []
        if self.command:
            facts.append(f"command {self.command!r}")
        if self.waited_s is not None:
            facts.append(f"waited {self.waited_s:.3f} s")
        if self.received:
            facts.append(f"received {_shorten(self.received)}")
        if facts:
            text += f" [{', '.join(facts)}]"
        return f"{text}. {self.advice}" if self.advice else text


class CannotOpen(ExchangeError):
    """The resource could not be opened at all."""

    advice = "Check the resource in the bench file, the cable and that the instrument is on."


class ConnectionRefused(CannotOpen):
    """The host answered that nothing listens on that port."""

    advice = (
        "Check the port in the bench file, that the instrument's socket service is switched on, "
        "and that no other program holds its only connection."
    )


class PeerClosed(ExchangeError):
    """The connection was open and the other side closed or lost it."""

    advice = "Check power and cable; the session has to be resynchronised before it is used again."


class NoAnswer(ExchangeError):
    """The time allowed passed without a complete line."""

    advice = (
        "Check that the instrument knows this request and is not busy, or allow more time in the "
        "[link] table of its dialect; the session has to be resynchronised before it is used again."
    )


class TransportFault(ExchangeError):
    """The VISA layer failed in a way that is none of the others."""

    advice = "Check the cable and the VISA library named in the bench file."


class WrongInstrument(ExchangeError):
    """Another instrument than the expected one answered."""

    advice = (
        "Check which instrument sits at that resource, or correct 'identity' in the bench file."
    )

    def __init__(self, *, expected: str, answered: str, role: str, resource: str) -> None:
        super().__init__(
            f"expected the identity to begin with {expected!r}, but {answered!r} answered",
            role=role,
            resource=resource,
            command="*IDN?",
            received=answered.encode("latin-1"),
        )
        self.expected = expected
        self.answered = answered


class OutOfStep(ExchangeError):
    """Asking now could take an old answer for the new one, so nothing was sent."""

    advice = "Resynchronise the session first."


class BadAnswer(ExchangeError):
    """A line that cannot be the answer to what was asked: truncated, garbled or too long."""

    advice = (
        "Check the terminator and the requests in the dialect; the session has to be "
        "resynchronised before it is used again."
    )


class BadNumber(BadAnswer):
    """A field that is not what it should be: a number, a boolean, an error-queue entry."""


class NotMeasured(ExchangeError):
    """The instrument answered properly that it has no value to give."""


class Overload(NotMeasured):
    """SCPI's infinity: the quantity is outside the range."""

    advice = "Choose a larger range."

    def __init__(self, *, negative: bool = False) -> None:
        super().__init__(f"overload: the value is {'below' if negative else 'above'} the range")
        self.negative = negative


class NotANumber(NotMeasured):
    """SCPI's not-a-number: there is nothing to measure."""

    advice = "Check the sensor and its leads."

    def __init__(self) -> None:
        super().__init__("the instrument says 'not a number': it has nothing to measure")


@dataclass(frozen=True, slots=True)
class ErrorEntry:
    """One entry of an instrument's error queue; number 0 means that the queue is empty."""

    number: int
    text: str

    def __str__(self) -> str:
        return f'{self.number},"{self.text}"'


class InstrumentError(ExchangeError):
    """The instrument put errors into its queue; ``number`` and ``text`` are the oldest one's."""

    advice = "The queue is empty now; check the value, the channel and the dialect's request."

    def __init__(
        self, entries: Sequence[ErrorEntry], *, role: str, resource: str, command: str
    ) -> None:
        listed = "; ".join(str(entry) for entry in entries)
        super().__init__(
            f"the instrument reports {listed}", role=role, resource=resource, command=command
        )
        self.entries = tuple(entries)
        self.number = self.entries[0].number
        self.text = self.entries[0].text


class NotConfirmed(ExchangeError):
    """A setting was accepted without an error, but reads back as something else."""

    advice = "Do not rely on this setting; check the instrument's limits and front panel."

    def __init__(
        self, *, asked: object, read_back: object, role: str, resource: str, command: str
    ) -> None:
        super().__init__(
            f"asked for {asked}, but it reads back as {read_back}",
            role=role,
            resource=resource,
            command=command,
        )
        self.asked = asked
        self.read_back = read_back


def _shorten(received: bytes) -> str:
    if len(received) <= SHOWN_BYTES:
        return repr(received)
    return f"{received[:SHOWN_BYTES]!r}... ({len(received)} bytes)"
