"""What benchkit needs of a bench, as small Protocols.

Anything that fits these can be guarded, measured with and tested: SCPI instruments over VISA in
``instruments/``, or a scripted stand-in in a test. All quantities are in volts, amperes, degrees
Celsius and seconds. Every method may raise ``benchkit.errors.LinkError``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

from benchkit.harness import Harness
from benchkit.reading import Reading


@dataclass(frozen=True, slots=True)
class SupplyState:
    """What a supply says of its own output."""

    output_on: bool
    voltage_V: float
    current_A: float
    constant_current: bool
    tripped: bool


@dataclass(frozen=True, slots=True)
class Protection:
    """Protection levels, as asked for or as read back from a supply."""

    over_voltage_V: float
    over_current_A: float


class Supply(Protocol):
    """A programmable DC supply output."""

    role: str

    def program(self, voltage_V: float, current_A: float) -> None:
        """Set voltage and current limit, read both back and raise LinkError if they differ."""

    def protect(self, protection: Protection) -> Protection:
        """Program over-voltage and over-current protection, clear old trips, return read-back."""

    def enable(self) -> None:
        """Switch the output on, confirmed by read-back."""

    def send_off(self) -> None:
        """Send output-off and wait for nothing: for several outputs that go off at once."""

    def disable(self, *, patiently: bool = True) -> None:
        """Switch the output off, confirmed by read-back; raises LinkError when it cannot be.

        patiently: sent blind first, even to a session that is out of step, and tried again, however
        long that takes; otherwise one exchange.
        """

    def state(self) -> SupplyState:
        """Read the output state, one round trip."""


class Load(Protocol):
    """An electronic load in constant-current mode."""

    role: str

    def draw(self, current_A: float) -> None:
        """Set the current and switch the input on, confirmed."""

    def release(self) -> None:
        """Switch the input off: sent blind first, then confirmed."""


class Points(Protocol):
    """The quantities the bench can read, by name (see ``benchkit.reading.POINT_UNITS``)."""

    def names(self) -> tuple[str, ...]:
        """Which points this bench can read."""

    def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
        """Take one reading; ``quick`` uses the short aperture of a watch reading."""

    def expect(self, point: str, largest: float) -> None:
        """Choose the fixed range for the coming readings from the largest value expected."""

    def forget(self) -> None:
        """Go back to the ranges of the bench file, and take no instrument's setting for granted:
        a run does not depend on what was measured before."""

    def can_burst(self, points: Sequence[str]) -> str | None:
        """None where these can be read in quick succession, all at once; else why not."""

    def arm_burst(self, points: Sequence[tuple[str, float]], seconds: float) -> None:
        """Begin to read ``(point, largest value expected)`` over and over, for ``seconds``; returns
        at once. Nothing else is read with these instruments until ``fetch_burst``."""

    def fetch_burst(self, began_s: float) -> list[Reading]:
        """Wait for its end and return all that was read, ``time_s`` counted from ``began_s``."""

    def recover(self, point: str) -> None:
        """After a LinkError: make the instrument that reads a point usable again, if it can be."""


class Interlock(Protocol):
    """A loop that is open while somebody can reach in."""

    role: str

    def closed(self) -> bool:
        """Whether it is closed now."""


class Wiring(Protocol):
    """The leads between instruments and stage: a person, a relay, or the simulated bench."""

    def arrange(self, harness: Harness) -> None:
        """Connect as told, with everything off; OperatorStopped when that is declined. What was
        done is proved by measurement afterwards."""

    def refit_fuse(self, name: str) -> None:
        """Have a new fuse put in the place of ``name``, everything off; OperatorStopped when that
        is declined."""


class Clock(Protocol):
    """Bench time. On a simulated bench it may run faster than the wall's."""

    def now(self) -> float:
        """Seconds since an arbitrary start, monotonic."""

    def sleep(self, seconds: float) -> float:
        """Let bench time pass; returns ``now()`` of the moment after."""


class Operator(Protocol):
    """The person at the bench."""

    def acknowledge(self, caution: str) -> bool:
        """Show a caution; True when it was read and accepted."""

    def instruct(self, text: str) -> bool:
        """Ask for something to be done by hand; True when the operator says it is done."""


class Journal(Protocol):
    """Where readings and events go before anything else happens with them."""

    def reading(self, step: str, reading: Reading) -> None:
        """Append a reading and hand it to the operating system."""

    def event(self, kind: str, text: str, **facts: object) -> None:
        """Append an event."""
