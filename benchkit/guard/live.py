"""The handle that a procedure holds while something is energised."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from benchkit.errors import InputError, Refused
from benchkit.guard.envelope import Envelope
from benchkit.guard.looking import Looking
from benchkit.guard.outputs import Outputs
from benchkit.harness import Source
from benchkit.reading import Reading

if TYPE_CHECKING:
    from benchkit.guard.guard import Guard

LATE_S = 1.0
"""A burst that is over for so long and was not fetched keeps the meter from the guard."""
BURST_LOOK_S = 0.05
"""While a burst runs the guard looks this often: all its other eyes are shut."""


class Live:
    """What a procedure can do while something is energised. Made by ``Guard.energised`` only."""

    def __init__(
        self, guard: Guard, outputs: Outputs, looking: Looking, envelope: Envelope
    ) -> None:
        self._guard, self.__outputs, self._looking = guard, outputs, looking
        self.envelope = envelope
        self._began_s = self._looked_s = guard.now()
        self.burst_began_s = math.nan
        """When the meter began, where the envelope asks for a burst that was not fetched yet."""

    def _require_on(self) -> None:
        """Refused once the step is over."""
        if self._guard._live is not self:
            raise Refused(f"{self.envelope.name} is over: nothing can be done in it any more")

    def draw(self, current_A: float) -> None:
        """Set the load, never above the envelope's current limit (InputError)."""
        self._require_on()
        if not 0 <= current_A < self.envelope.current_limit_A:
            raise InputError(
                f"{self.envelope.name}: a load of {current_A:g} A is not inside its limit of "
                f"{self.envelope.current_limit_A:.3g} A"
            )
        self._guard._look_when_due()
        self.__outputs.load.draw(current_A)

    def rest(self) -> None:
        """Draw nothing, keep the supply on.

        Not by releasing the load: what that does to be certain may take long with a load that
        does not answer, and the supply would be on and unwatched meanwhile.
        """
        self.draw(0.0)

    def connect(self, source: Source) -> None:
        """Switch the envelope's other source on as well, as it was programmed; Refused for one
        that the envelope does not hold."""
        self._require_on()
        drive = self.envelope.drives().get(source)
        if drive is None:
            raise Refused(f"{self.envelope.name} holds nothing for the {source}")
        self.look()
        self._guard.remark("connected", f"the {source} at {drive.sentence()}")
        self.__outputs.enable(source, drive, self._guard.now())

    def disconnect(self, source: Source) -> None:
        """Switch one source off, confirmed by its read-back, and leave the other on."""
        self._require_on()
        self.__outputs.disable(source)
        self._guard.remark("disconnected", f"the {source}")
        self.look()

    def look(self) -> float:
        """Look now, whatever the polling interval; returns the time of the look."""
        guard = self._guard
        self._require_on()
        burst = self.envelope.burst
        if burst is not None and guard.now() > self.burst_began_s + burst.seconds + LATE_S:
            guard._trip_on([("the burst", "was not fetched in time")], guard.now())
        self._looked_s = self._looking.look(
            guard.now, self._began_s, guard.ceilings.poll_s,
            meter=math.isnan(self.burst_began_s),
        )  # fmt: skip
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
        if not math.isnan(self.burst_began_s):
            poll_s = min(poll_s, BURST_LOOK_S)
        while (left := until - now) > 1e-6:
            due = self._looked_s + poll_s - now
            # A clock that was set back must not lengthen the time to the next look.
            now = (
                self._guard._sleep(min(left, due))
                if 1e-6 < due <= poll_s * (1 + 1e-9)
                else self.look()
            )
        return now

    def burst(self) -> list[Reading]:
        """Wait for the end of the envelope's burst, looking at all but the meter; then everything
        off, and only then return what it read, recorded: to fetch it takes long, and nobody looks.
        """
        burst, began = self.envelope.burst, self.burst_began_s
        if burst is None or math.isnan(began):
            raise Refused(f"{self.envelope.name} has no burst to be fetched")
        self.wait(max(began + burst.seconds - self._guard.now(), 0.0))
        self.__outputs.all_off()  # confirmed at the end of the step
        readings = self._guard.take_burst(began)
        self.burst_began_s = math.nan
        return readings

    def read(self, point: str) -> Reading:
        """A recorded reading (see ``Guard.read``); overload or a lost sensor trips."""
        reading = self._guard.read(point)
        if not reading.usable:
            text = f"gives no usable reading ({reading.status})"
            self._guard._trip_on([(point, text)], reading.time_s)
        return reading

    def check_ports(self, exposed_V: float, guarded_V: float, drop_V: float) -> None:
        """Trip when the guarded side is driven the wrong way, or a measuring lead came off."""
        self._guard.check_ports(self.envelope, exposed_V, guarded_V, drop_V)

    def check_loss(self, drop_V: float, current_A: float) -> None:
        """Trip when the stage burns more than the envelope allows."""
        self._guard.check_loss(self.envelope, drop_V, current_A)
