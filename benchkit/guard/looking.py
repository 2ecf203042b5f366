"""One look at everything that trips a step."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator

from benchkit.files.guarding import Thresholds
from benchkit.guard.envelope import PROOF_V, Envelope
from benchkit.guard.outputs import Outputs
from benchkit.guard.trips import Trip, above, of_supply, of_voltage
from benchkit.guard.watch import Watch
from benchkit.harness import Harness, Source
from benchkit.protocols import Interlock, SupplyState
from benchkit.reading import Reading

Found = Callable[[Iterable[Trip], float], None]
"""Ends the step with the first of these, if there is any."""


class Looking:
    """Follows one energised step. ``trip_on`` raises Tripped; ``keep`` records a reading;
    ``read`` reads and records one at a stated time."""

    def __init__(
        self,
        outputs: Outputs,
        interlock: Interlock | None,
        envelope: Envelope,
        harness: Harness,
        watch: Watch,
        thresholds: Thresholds,
        *,
        read: Callable[[str, float], Reading],
        keep: Callable[[Reading], None],
        trip_on: Found,
    ) -> None:
        self._outputs, self._interlock, self._envelope = outputs, interlock, envelope
        self._harness, self._watch, self._thresholds = harness, watch, thresholds
        self._read, self._keep, self._trip_on = read, keep, trip_on

    def look(
        self, now: Callable[[], float], began_s: float, poll_s: float, *, meter: bool
    ) -> float:
        """Look once; returns its time, which stamps all that was read in it.

        meter: whether the voltmeter may be asked; it is not while a burst runs.
        """
        states = {source: self._outputs.state(source) for source in self._outputs.on}
        other = self._outputs.found_on()
        at = now()
        if other:
            self._trip_on([("another source", other)], at)
        for source, state in states.items():
            self._keep(Reading(at, f"{source}_voltage", state.voltage_V, "V", 0.0, 0.0))
            self._keep(Reading(at, f"{source}_current", state.current_A, "A", 0.0, 0.0))
        for source, state in states.items():
            self._trip_on(of_supply(source, self._outputs.on[source], state), at)
        if self._interlock is not None and not self._interlock.closed():
            self._trip_on([("the interlock loop", f"is open ({self._interlock.role})")], at)
        case = self._usable("case", at)
        envelope = self._envelope
        self._trip_on(above("case", case.value, envelope.case_max_C, "C"), at)
        self._trip_on(self._watch.trips(envelope, states.values(), case.value, at), at)
        highest = max((drive.voltage_V for drive in envelope.drives().values()), default=0.0)
        if meter and highest > PROOF_V:
            self._look_at_a_voltage(states, at, poll_s)
        self._trip_on(above("time", at - began_s, envelope.longest_s, "s"), at)
        return at

    def _look_at_a_voltage(
        self, states: dict[Source, SupplyState], at: float, poll_s: float
    ) -> None:
        """By turns the two ports: the guarded one's sign, and sources against the meter."""
        point = self._watch.voltage_due(at, poll_s)
        if point is not None:
            reading = self._usable(point, at)
            steady = self._outputs.steady(at)
            known = {source: state for source, state in states.items() if source in steady}
            found: Iterator[Trip] = of_voltage(
                self._envelope, known, reading, self._harness, self._thresholds
            )
            self._trip_on(found, at)

    def _usable(self, point: str, at: float) -> Reading:
        reading = self._read(point, at)
        if not reading.usable:
            self._trip_on([(point, f"gives no usable reading ({reading.status})")], at)
        return reading
