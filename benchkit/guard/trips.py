"""What one look finds that must end a step: pure comparisons of readings with an envelope."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from benchkit.files.guarding import Thresholds
from benchkit.guard.envelope import Drive, Envelope
from benchkit.guard.polarity import mesh_most_V
from benchkit.harness import NAMES, Harness, Source
from benchkit.protocols import SupplyState
from benchkit.reading import Reading

Trip = tuple[str, str]
"""What tripped, and the rest of the sentence: reading and threshold."""
SUPPLY_TRIPPED = "own protection"


def above(what: str, value: float, threshold: float, unit: str) -> Iterator[Trip]:
    """A trip where the value is not at or below its threshold; nan trips."""
    if not value <= threshold:
        yield what, f"is {value:.4g} {unit}, above {threshold:.4g} {unit}"


def of_supply(source: Source, drive: Drive, state: SupplyState) -> Iterator[Trip]:
    """What a source says of its own output."""
    name = NAMES[source]
    if state.tripped:
        yield f"{name}'s {SUPPLY_TRIPPED}", "has tripped"
    if not state.output_on:
        yield f"{name}'s output", "went off by itself"
    if state.constant_current and not drive.may_limit:
        yield (
            name,
            f"limits its current at {state.current_A:.3g} A, which the step does not expect",
        )
    yield from above(f"{source}_voltage", abs(state.voltage_V), drive.over_voltage_V, "V")
    yield from above(f"{source}_current", abs(state.current_A), drive.over_current_A, "A")


def of_voltage(
    envelope: Envelope,
    states: Mapping[Source, SupplyState],
    reading: Reading,
    harness: Harness,
    thresholds: Thresholds,
) -> Iterator[Trip]:
    """The guarded port's sign, and every source's own voltage against the meter's at its port."""
    if reading.point == "guarded_voltage" and not reading.value >= envelope.guarded_min_V:
        yield reading.point, f"is {reading.value:.4g} V, below {envelope.guarded_min_V:.4g} V"
    drives = envelope.drives()
    for source, port in harness.sources():
        state = states.get(source)
        if f"{port}_voltage" != reading.point or state is None or state.constant_current:
            continue
        sign = harness.sign if port == "exposed" else 1
        apart = abs(sign * reading.value - state.voltage_V)
        most = thresholds.apart_V + thresholds.apart_percent / 100 * drives[source].voltage_V
        yield from above(f"{source}_voltage against {reading.point}", apart, most, "V")


def of_ports(
    envelope: Envelope, exposed_V: float, guarded_V: float, drop_V: float, thresholds: Thresholds
) -> Iterator[Trip]:
    """The guarded port's sign, and Kirchhoff's voltage law around the three meter channels."""
    if not guarded_V >= envelope.guarded_min_V:
        yield "guarded_voltage", f"is {guarded_V:.4g} V, below {envelope.guarded_min_V:.4g} V"
    left, most = abs(exposed_V - guarded_V - drop_V), mesh_most_V(exposed_V, thresholds)
    yield from above("exposed less guarded voltage less drop (a measuring lead?)", left, most, "V")
