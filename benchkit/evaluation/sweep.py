"""The forward sweep: offsets removed by zeros, drop at each current with its budget."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.sources import accuracy_of, flow_of, gain, rectangular
from benchkit.files.bench import BenchFile, PointName
from benchkit.metrology import Budget, Component
from benchkit.reading import Reading
from benchkit.records.record import Record

Floats = NDArray[np.float64]

ZERO_LIMITS = 4.0
"""A zero further off than this many declared offset limits is not an offset of the meter."""
LAWS_END_C = 250.0
SPREAD_SHARE = 1 / 3
"""The mean of up and down is taken at times that lie alike around the turning point, so a steady
warming cancels: what is left of half their difference is taken as this share at most (common
practice, no source)."""
SLOPE_SHARE = 0.1
"""Relative limit of error of the slope by which a drop is carried to the exact current."""


@dataclass(frozen=True)
class Zero:
    """What a point reads when there is nothing to read; used False when it cannot be trusted."""

    value: float
    u: float
    dof: float
    drift: float
    """Half the change from before to after."""
    noise: float
    noise_dof: float
    used: bool


@dataclass(frozen=True)
class Sweep:
    """Every visit of the sweep in the order taken; arrays of shape (visits,)."""

    target_A: Floats
    rising: NDArray[np.bool_]
    current_A: Floats
    drop_V: Floats
    case_C: Floats
    ambient_C: float
    drop_zero: Zero
    current_zero: Zero
    drop_range_V: float
    current_range_V: float

    @property
    def targets(self) -> list[float]:
        """The currents that were visited, rising."""
        return sorted({float(a) for a in self.target_A})

    def visits(self, target_A: float) -> NDArray[np.bool_]:
        """Which visits are of one current."""
        return np.abs(self.target_A / target_A - 1) < 1e-9

    @property
    def loss_W(self) -> Floats:
        """Loss at each visit."""
        return self.drop_V * self.current_A


@dataclass(frozen=True)
class DropAt:
    """The drop at one current."""

    current_A: float
    drop_V: float
    case_C: float
    slope_ohm: float
    budget: Budget


def read_sweep(record: Record) -> Sweep | None:
    """Take a record's sweep apart; None when it has none."""
    steps = record.steps("sweep/")
    taken = [(record.at(step, "drop"), record.at(step, "exposed_current")) for step in steps]
    if not any(drops and currents for drops, currents in taken):
        return None
    # A part that dropped too much for its range was read on a larger one: the whole sweep then
    # counts with the errors of the largest, and a zero taken on another does not apply.
    ranges = tuple(max(r.range for pair in taken for r in pair[k]) for k in (0, 1))
    drop_zero = read_zero(record, "drop", ranges[0], 1.0)
    shunt = record.bench.points["exposed_current"].shunt_ohm or 1.0
    current_zero = read_zero(record, "exposed_current", ranges[1], 1 / shunt)
    lead = record.bench.points["drop"].lead_ohm
    warm, flow = temperatures(record, "case"), flow_of(record.stage)
    rows = []
    for step, (drops, currents) in zip(steps, taken, strict=True):
        _, _, way, target = step.split("/")
        if not drops or not currents:
            continue
        amps = flow * (_mean(currents) - (current_zero.value if current_zero.used else 0.0))
        volts = flow * (_mean(drops) - (drop_zero.value if drop_zero.used else 0.0)) - lead * amps
        at_s = float(np.mean([r.time_s for r in drops]))
        rows.append((float(target), way == "up", amps, volts, float(np.interp(at_s, *warm))))
    target_A, rising, current_A, drop_V, case_C = (np.array(c) for c in zip(*rows, strict=True))
    ambient = temperatures(record, "ambient")[1]
    return Sweep(
        target_A,
        rising.astype(bool),
        current_A,
        drop_V,
        case_C,
        float(ambient[0]),
        drop_zero,
        current_zero,
        ranges[0],
        ranges[1],
    )


def junctions_C(drops: Sequence[DropAt], junction_to_case_K_per_W: float) -> Floats:
    """Junction temperature at each drop, for the datasheet's laws, which end at LAWS_END_C: an
    open part seems to burn far more than it does."""
    hot = [d.case_C + junction_to_case_K_per_W * d.drop_V * d.current_A for d in drops]
    return np.minimum(np.array(hot, dtype=np.float64), np.float64(LAWS_END_C))


def read_zero(record: Record, point: PointName, range_V: float, scale: float) -> Zero:
    """Mean and scatter of the zeros before and after; ``scale`` turns volts into the unit."""
    before, after = (record.at(f"zero/{when}", point) for when in ("before", "after"))
    values = [np.array([r.value for r in group]) for group in (before, after) if group]
    if not values:
        return Zero(0.0, 0.0, math.inf, 0.0, 0.0, math.inf, used=False)
    means = [float(v.mean()) for v in values]
    dof = sum(v.size - 1 for v in values)
    noise = math.sqrt(sum(float(((v - v.mean()) ** 2).sum()) for v in values) / dof) if dof else 0.0
    size = sum(v.size for v in values)
    drift = 0.5 * abs(means[-1] - means[0])
    limit = accuracy_of(record.bench, point, range_V).offset_limit() * scale
    used = (
        len(values) == 2
        and all(r.range == range_V for r in [*before, *after])
        and max(abs(m) for m in means) <= ZERO_LIMITS * limit
    )
    return Zero(
        float(np.mean(means)), noise / math.sqrt(size), max(dof, 1), drift, noise, max(dof, 1), used
    )


def drop_at(sweep: Sweep, bench: BenchFile, target_A: float) -> DropAt:
    """Drop at exactly ``target_A``: the mean of its visits, carried along the local slope."""
    chosen = sweep.visits(target_A)
    slope = local_slope(sweep, target_A)
    carried = sweep.drop_V[chosen] - slope * (sweep.current_A[chosen] - target_A)
    drop, case = float(carried.mean()), float(sweep.case_C[chosen].mean())
    moved = slope * float(sweep.current_A[chosen].mean() - target_A)
    rise = max(case - sweep.ambient_C, 0.0)
    table = bench.points["drop"]
    spread = 0.5 * float(carried.max() - carried.min())
    components = [
        *reading_components(sweep, bench, drop, target_A, slope, int(chosen.sum()), "sweep"),
        rectangular("up against down: heat and contact", SPREAD_SHARE * spread),
        rectangular("carried to the exact current", SLOPE_SHARE * moved),
        rectangular("fixture inside the Kelvin taps", table.lead_tolerance_ohm * target_A),
        rectangular("thermoelectric voltages", table.thermoelectric_V_per_K * rise),
    ]
    return DropAt(target_A, drop, case, slope, Budget(c for c in components if c.u != 0.0))


def reading_components(
    sweep: Sweep,
    bench: BenchFile,
    drop_V: float,
    current_A: float,
    slope: float,
    readings: int,
    where: str,
) -> list[Component]:
    """What the instruments add to a drop at a stated current: gains, zeros, noise, the shunt.

    ``where`` says which readings were averaged, so that their noise is not taken for that of
    others."""
    shunt = bench.points["exposed_current"]
    noise = sweep.drop_zero.noise / math.sqrt(max(readings, 1))
    current_noise = -slope * sweep.current_zero.noise / math.sqrt(max(readings, 1))
    components = [
        gain(bench, "drop", sweep.drop_range_V, drop_V),
        gain(bench, "exposed_current", sweep.current_range_V, -slope * current_A),
        rectangular("shunt tolerance", -slope * current_A * shunt.shunt_tolerance_percent / 100),
        Component(f"noise of a drop reading ({where})", noise, dof=sweep.drop_zero.noise_dof),
        Component(
            f"noise of a current reading ({where})",
            current_noise,
            dof=sweep.current_zero.noise_dof,
        ),
    ]
    components += _zero_components("drop", sweep.drop_zero, bench, sweep.drop_range_V, 1.0)
    ohms = shunt.shunt_ohm or 1.0
    components += _zero_components(
        "exposed_current", sweep.current_zero, bench, sweep.current_range_V, -slope / ohms, ohms
    )
    return components


def _zero_components(
    point: PointName,
    zero: Zero,
    bench: BenchFile,
    range_V: float,
    per_volt: float,
    unit_V: float = 1.0,
) -> list[Component]:
    if not zero.used:
        limit = accuracy_of(bench, point, range_V).offset_limit()
        return [rectangular(f"offset of {point}, not zeroed", per_volt * limit)]
    per_unit = per_volt * unit_V
    return [
        Component(f"zero of {point}", per_unit * zero.u, dof=zero.dof),
        rectangular(f"drift of the zero of {point}", per_unit * zero.drift),
    ]


def local_slope(sweep: Sweep, target_A: float) -> float:
    """dV/dI in ohms at a current: that of V = a + b ln I + c I through the three nearest.

    A channel is the c of it and a junction with series resistance is b and c, so the form fits
    both; secants of a junction are up to 28 % off.
    """
    means = np.array(
        [
            (sweep.current_A[v].mean(), sweep.drop_V[v].mean())
            for v in (sweep.visits(t) for t in sweep.targets)
        ]
    )
    if len(means) < 3 or not (means[:, 0] > 0).all():  # an open part carries nothing
        return float(means[-1, 1] / max(abs(means[-1, 0]), 1e-9))
    nearest = means[np.argsort(np.abs(np.log(means[:, 0] / target_A)))[:3]]
    amps = nearest[:, 0] / target_A
    design = np.column_stack([np.ones(3), np.log(amps), amps])
    _, b, c = np.linalg.solve(design, nearest[:, 1])
    return float((b + c) / target_A)


def _mean(readings: list[Reading]) -> float:
    return float(np.mean([r.value for r in readings]))


def temperatures(record: Record, point: str) -> tuple[Floats, Floats]:
    """Times and values of a whole run, (n,) each; one nan where nothing was read."""
    usable = [r for _, r in record.readings if r.point == point and r.usable]
    if not usable:
        return np.array([0.0]), np.array([math.nan])
    return np.array([r.time_s for r in usable]), np.array([r.value for r in usable])
