"""What a procedure holds while something is energised."""

from __future__ import annotations

from typing import TYPE_CHECKING

from benchkit.errors import InputError
from benchkit.guard.envelope import Envelope
from benchkit.protocols import Load
from benchkit.reading import Reading

if TYPE_CHECKING:
    from benchkit.guard.guard import Guard


class Live:
    """What a procedure can do while something is energised. Made by ``Guard.energised`` only."""

    def __init__(self, guard: Guard, load: Load, envelope: Envelope) -> None:
        self._guard, self.__load = guard, load
        self.envelope = envelope
        self._began_s = self._looked_s = guard.now()

    def draw(self, current_A: float) -> None:
        """Set the load, never above the envelope's current limit (InputError)."""
        if not 0 <= current_A < self.envelope.current_limit_A:
            raise InputError(
                f"{self.envelope.name}: a load of {current_A:g} A is not inside its limit of "
                f"{self.envelope.current_limit_A:.3g} A"
            )
        self._guard._look_when_due()
        self.__load.draw(current_A)

    def rest(self) -> None:
        """Draw nothing, keep the supply on.

        Not by releasing the load: what that does to be certain may take long with a load that
        does not answer, and the supply would be on and unwatched meanwhile.
        """
        self.draw(0.0)

    def look(self) -> float:
        """Look now, whatever the polling interval; returns the time of the look."""
        self._looked_s = self._guard.look(self.envelope, self._began_s)
        return self._looked_s

    @property
    def looked_s(self) -> float:
        """When the guard looked last."""
        return self._looked_s

    def wait(self, seconds: float) -> float:
        """Look, then let ``seconds`` pass, looking again every polling interval.

        Returns the time at the end.
        """
        now = self.look()
        until = now + seconds
        poll_s = self._guard.ceilings.poll_s
        while (left := until - now) > 1e-6:
            due = self._looked_s + poll_s - now
            # A clock that was set back must not lengthen the time to the next look.
            now = (
                self._guard._sleep(min(left, due))
                if 0 < due <= poll_s * (1 + 1e-9)
                else self.look()
            )
        return now

    def read(self, point: str) -> Reading:
        """A recorded reading (see ``Guard.read``); overload or a lost sensor trips."""
        reading = self._guard.read(point)
        if not reading.usable:
            self._guard._trip(point, f"gives no usable reading ({reading.status})", reading.time_s)
        return reading

    def check_ports(self, exposed_V: float, guarded_V: float, drop_V: float) -> None:
        """Trip when the guarded side is driven the wrong way, or a measuring lead came off."""
        self._guard.check_ports(self.envelope, exposed_V, guarded_V, drop_V)

    def check_loss(self, drop_V: float, current_A: float) -> None:
        """Trip when the stage burns more than the envelope allows."""
        self._guard.check_loss(self.envelope, drop_V, current_A)
