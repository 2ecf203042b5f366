"""What one look finds that must end a step: pure comparisons of readings with an envelope."""

from __future__ import annotations

from collections.abc import Iterator

from benchkit.guard.envelope import Envelope
from benchkit.guard.polarity import MESH_SHARE, MESH_V
from benchkit.protocols import SupplyState
from benchkit.reading import Reading

Trip = tuple[str, str]
"""What tripped, and the rest of the sentence: reading and threshold."""
SUPPLY_TRIPPED = "the supply's own protection"
APART_V, APART_SHARE = 0.5, 0.05
"""How far the supply's own voltage may be from the meter's at the exposed port: leads drop some."""


def above(what: str, value: float, threshold: float, unit: str) -> Iterator[Trip]:
    """A trip where the value is not at or below its threshold; nan trips."""
    if not value <= threshold:
        yield what, f"is {value:.4g} {unit}, above {threshold:.4g} {unit}"


def of_supply(envelope: Envelope, state: SupplyState) -> Iterator[Trip]:
    """What the supply says of its own output."""
    if state.tripped:
        yield SUPPLY_TRIPPED, "has tripped"
    if not state.output_on:
        yield "the supply's output", "went off by itself"
    if state.constant_current and not envelope.may_limit:
        yield (
            "the supply",
            f"limits its current at {state.current_A:.3g} A, which the step does not expect",
        )
    yield from above("supply_voltage", abs(state.voltage_V), envelope.over_voltage_V, "V")
    yield from above("supply_current", abs(state.current_A), envelope.over_current_A, "A")


def of_voltage(
    envelope: Envelope, state: SupplyState, reading: Reading, sign: int
) -> Iterator[Trip]:
    """The guarded port's sign, or the supply's own voltage against the meter's; ``sign`` of the
    exposed voltage in this harness."""
    if reading.point == "guarded_voltage":
        if not reading.value >= envelope.guarded_min_V:
            yield (
                reading.point,
                f"is {reading.value:.4g} V, below {envelope.guarded_min_V:.4g} V",
            )
    elif not state.constant_current:
        apart = abs(sign * reading.value - state.voltage_V)
        most = APART_V + APART_SHARE * envelope.voltage_V
        yield from above("supply_voltage against exposed_voltage", apart, most, "V")


def of_ports(
    envelope: Envelope, exposed_V: float, guarded_V: float, drop_V: float
) -> Iterator[Trip]:
    """The guarded port's sign, and Kirchhoff's voltage law around the three meter channels."""
    if not guarded_V >= envelope.guarded_min_V:
        yield "guarded_voltage", f"is {guarded_V:.4g} V, below {envelope.guarded_min_V:.4g} V"
    left = abs(exposed_V - guarded_V - drop_V)
    most = MESH_V + MESH_SHARE * abs(exposed_V)
    yield from above("exposed less guarded voltage less drop (a measuring lead?)", left, most, "V")
