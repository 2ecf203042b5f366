"""The supply sweep: drop and gate voltage against supply voltage, and where the stage switches on.

A stage counts as on while its drop is at most a fixed level: the geometric mean of what a typical
board drops at the highest voltage of the sweep and of what a typical body diode drops at the same
current, both at the stage's nominal ambient temperature. On a plot of log drop the level lies half
way between a channel that is fully on and one that is off, where the curve is steepest; it is one
number for all boards of a stage, so that boards can be compared, and a board whose channel never
carries anything stays above it.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from benchkit.evaluation.sources import accuracy_of, flow_of, gain, rectangular
from benchkit.evaluation.sweep import temperatures
from benchkit.files.bench import BenchFile, PointName
from benchkit.metrology import Budget, Component
from benchkit.reading import Reading
from benchkit.records.record import Record

STEPS = "supply/"
PORTS: tuple[PointName, PointName] = ("exposed_voltage", "guarded_voltage")
CARRIED = 0.95
"""Of the current asked for; the load of a stage that lets less through has not its current."""
PER_CURRENT = 2.0
"""How a drop goes with the current at most, relative to relative: a channel of which the load's
current takes up the overdrive goes faster than in proportion (judgement)."""


@dataclass(frozen=True)
class Seen:
    """A point's mean over one voltage. scatter: squares of the departures from it, summed."""

    point: PointName
    value: float
    range: float
    readings: int
    scatter: float


@dataclass(frozen=True)
class Step:
    """One supply voltage. target_V: as programmed. supply: at the port that feeds the stage. drop,
    current: positive where the stage works as it should; gate: with its sign, None unread."""

    target_V: float
    supply: Seen
    drop: Seen
    current: Seen
    gate: Seen | None
    case_C: float
    contradicts_V: float
    """By how much the drop read is not the difference of the two ports' voltages."""
    carried: bool
    """Whether the load had its current; elsewhere the drop says only that the stage is not on."""


@dataclass(frozen=True)
class SupplySweep:
    """As much of it as there is. steps: rising in voltage."""

    current_A: float
    steps: tuple[Step, ...]
    ended: tuple[str, ...]
    """Why it does not reach down to the lowest voltage listed, where that was expected."""
    trips: tuple[str, ...]
    short: str
    """What is missing, in words; "" when it is whole."""


@dataclass(frozen=True)
class Crossing:
    """Where the drop comes down to a level as the voltage rises.

    below: the lowest voltage measured from which it is above the level no more, however low that
    is. above: the voltage next below it, None where there is none and the crossing is at ``below``
    or lower. share: how far from ``below`` to ``above`` it is.
    """

    value_V: float
    below: Step
    above: Step | None
    share: float
    level_V: float


def read_supply_sweep(record: Record) -> SupplySweep | None:
    """Take a record's supply sweep apart; None when its stage file has no such table."""
    settings = record.stage.supply_sweep
    if settings is None:
        return None
    amps = settings.current_A or record.stage.stage.current_nominal_A
    found = [_step(record, name, amps) for name in record.steps(STEPS)]
    steps = tuple(sorted((s for s in found if s is not None), key=lambda s: s.target_V))
    ended = tuple(record.said("supply-sweep-ends"))
    trips = tuple(
        str(event.get("text", "")) for event in record.events
        if event.get("kind") == "trip" and str(event.get("step", "")).startswith("supply")
    )  # fmt: skip
    low, top = settings.voltages_V[0], settings.voltages_V[-1]
    if not steps or steps[-1].target_V != top:
        short = f"{top:g} V was not measured"
    elif steps[0].target_V != low and not ended:
        short = f"it came down to {steps[0].target_V:g} V of {low:g} V"
    else:
        short = ""
    return SupplySweep(amps, steps, ended, trips, short)


def _step(record: Record, name: str, amps: float) -> Step | None:
    """None when a voltage or the current was not read."""
    flow = flow_of(record.stage)
    fed: PointName = "exposed_voltage" if flow > 0 else "guarded_voltage"
    supply, current = _seen(record, name, fed, 1), _seen(record, name, "exposed_current", flow)
    drop, gate = _seen(record, name, "drop", flow), _seen(record, name, "gate_voltage", 1)
    if supply is None or current is None or drop is None:
        return None
    ports = [_seen(record, name, point, flow) for point in PORTS]
    apart = math.nan
    if ports[0] is not None and ports[1] is not None:
        apart = ports[0].value - ports[1].value - drop.value
    own = drop.value - record.bench.points["drop"].lead_ohm * current.value
    drop = Seen("drop", own, drop.range, drop.readings, drop.scatter)
    at_s = record.at(name, "drop")[-1].time_s
    case = float(np.interp(at_s, *temperatures(record, "case")))
    return Step(
        float(name.removeprefix(STEPS)), supply, drop, current, gate, case, apart,
        current.value >= CARRIED * amps,
    )  # fmt: skip


def _seen(record: Record, name: str, point: PointName, sign: int) -> Seen | None:
    readings: list[Reading] = record.at(name, point)
    most = max((r.range for r in readings), default=0.0)
    values = sign * np.array([r.value for r in readings if r.range == most])
    if not values.size:
        return None
    mean = float(values.mean())
    return Seen(point, mean, most, values.size, float(((values - mean) ** 2).sum()))


def is_on(step: Step, level_V: float) -> bool:
    """Whether a stage drops no more than this, and carries its current."""
    return step.carried and step.drop.value <= level_V


def crossing(steps: Sequence[Step], level_V: float) -> Crossing | None:
    """None when it is above the level at the highest voltage already. Between two voltages it is
    interpolated along the logarithm of the drop; in the middle where the load had no current."""
    below: Step | None = None
    for step in reversed(steps):
        if not is_on(step, level_V):
            break
        below = step
    else:
        return Crossing(below.supply.value, below, None, 0.0, level_V) if below else None
    if below is None:
        return None
    share = 0.5
    if step.carried:
        least = max(min(below.drop.value, level_V), 1e-9)
        share = math.log(level_V / least) / math.log(step.drop.value / least)
    value = (1 - share) * below.supply.value + share * step.supply.value
    return Crossing(value, below, step, share, level_V)


def crossing_budget(sweep: SupplySweep, bench: BenchFile, found: Crossing) -> Budget:
    """Of ``found.value_V``. One that lies lower than anything measured has no interval."""
    above, weights = found.above, ((found.below, 1 - found.share), (found.above, found.share))
    components: list[Component] = []
    per_log = 0.0
    if above is not None:
        apart = found.below.supply.value - above.supply.value
        components.append(
            rectangular(
                "anywhere between the two voltages it was measured at",
                apart * max(found.share, 1 - found.share),
            )
        )
        if above.carried and found.below.drop.value > 0:
            per_log = apart / math.log(above.drop.value / found.below.drop.value)
    for step, weight in weights:
        if step is not None and weight:
            components += seen_components(sweep, bench, step.supply, weight)
            per_volt = weight * per_log / max(step.drop.value, 1e-9)
            components += drop_components(sweep, bench, step, per_volt)
    return Budget(c for c in components if c.u != 0.0)


def drop_components(
    sweep: SupplySweep, bench: BenchFile, step: Step, per_volt: float
) -> Iterator[Component]:
    """What a drop's errors do to a result that goes by ``per_volt`` with the drop: the meter, the
    fixture, and a current that is not exactly the one asked for."""
    yield from seen_components(sweep, bench, step.drop, per_volt)
    amps, shunt = step.current, bench.points["exposed_current"]
    fixture = bench.points["drop"].lead_tolerance_ohm * amps.value
    yield rectangular("fixture inside the Kelvin taps", per_volt * fixture)
    if not step.carried:
        return
    per_share = -per_volt * PER_CURRENT * step.drop.value
    yield gain(bench, "exposed_current", amps.range, per_share)
    yield rectangular("shunt tolerance", per_share * shunt.shunt_tolerance_percent / 100)
    volts = accuracy_of(bench, "exposed_current", amps.range).offset_limit()
    offset = volts / (shunt.shunt_ohm or 1.0) / sweep.current_A
    yield rectangular("offset of exposed_current, not zeroed", per_share * offset)
    off = amps.value / sweep.current_A - 1
    yield rectangular("current not exactly as stated", per_share * off)


def seen_components(
    sweep: SupplySweep, bench: BenchFile, seen: Seen, per_unit: float
) -> Iterator[Component]:
    """Gain, offset and noise of a voltage's mean, as they reach a result."""
    yield gain(bench, seen.point, seen.range, per_unit * seen.value)
    offset = accuracy_of(bench, seen.point, seen.range).offset_limit()
    yield rectangular(f"offset of {seen.point} on its {seen.range:g} V range", per_unit * offset)
    alike = [s for s in _all(sweep, seen.point) if s.range == seen.range]
    dof = sum(s.readings - 1 for s in alike)
    if dof > 0:
        noise = math.sqrt(sum(s.scatter for s in alike) / dof / seen.readings)
        own = f"noise of {seen.point} on its {seen.range:g} V range"
        yield Component(own, per_unit * noise, dof=dof)


def _all(sweep: SupplySweep, point: PointName) -> Iterator[Seen]:
    for step in sweep.steps:
        for seen in (step.supply, step.drop, step.gate):
            if seen is not None and seen.point == point:
                yield seen
