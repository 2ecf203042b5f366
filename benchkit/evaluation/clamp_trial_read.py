"""The trial of a clamp, taken apart: leakage the right way round, drop at each current, before and
after what might have hurt it."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from benchkit.evaluation.clamp_trial_band import DropBand, LeakageBand, drop_band, leakage_band
from benchkit.evaluation.reverse import Figure
from benchkit.evaluation.sources import accuracy_of, gain, rectangular
from benchkit.evaluation.sweep import Zero, temperatures
from benchkit.evaluation.trial_zero import zero_of
from benchkit.files.bench import PointName
from benchkit.metrology import Budget, Component
from benchkit.reading import Reading
from benchkit.records.record import Record
from benchkit.stage import Stage

When = Literal["before", "after"]
CARRIED_SHARE = 0.1
"""Relative limit of error of the law's slope, by which a drop is carried to the exact current."""
TEMPERATURE_K = 0.5
"""How well the case says, before and after, how warm the junction is (judgement)."""
SHORT_V = 0.1
"""A clamp that drops less than this is none: no junction does at currents that are read."""
FLOWS = 0.3
"""Of the current asked for: with less the clamp, or what is in its way, is open."""


@dataclass(frozen=True)
class Leakage:
    """At ``voltage_V`` the right way round: into the exposed plus terminal, in A."""

    voltage_V: float
    case_C: float
    leakage: Figure
    band: LeakageBand


@dataclass(frozen=True)
class ClampDrop:
    """How far below zero the guarded port is with the leads crossed.

    drop: at exactly ``target_A``. current: as it was read. driven_V: how far below zero the
    exposed port was.
    """

    target_A: float
    current: Figure
    driven_V: float
    drop: Figure
    case_C: float
    junction_C: float
    band: DropBand

    @property
    def state(self) -> Literal["junction", "short", "open"]:
        """What it looks like."""
        if self.current.value < FLOWS * self.target_A:
            return "open"
        return "short" if self.drop.value < SHORT_V else "junction"


@dataclass(frozen=True)
class ClampState:
    """What was read of the clamp at one time; drops: rising in current."""

    when: When
    leakage: Leakage | None
    drops: tuple[ClampDrop, ...]


def read_state(record: Record, stage: Stage, when: When) -> ClampState:
    """As much of it as there is."""
    drops = sorted(_drops(record, stage, when), key=lambda each: each.target_A)
    return ClampState(when, _leakage(record, stage, when), tuple(drops))


def _leakage(record: Record, stage: Stage, when: When) -> Leakage | None:
    step, zeros = f"clamp/{when}/leakage", f"clamp/{when}/zero-leakage"
    current = record.at(step, "exposed_current")
    volts = record.at(step, "exposed_voltage")
    if not current or not volts:
        return None
    zero = zero_of(record, zeros, "exposed_current", step)
    voltage, case = mean(volts), float(np.interp(current[-1].time_s, *temperatures(record, "case")))
    figure = figure_of(record, "exposed_current", current, zero, 1, step)
    warm = case if math.isfinite(case) else stage.file.stage.ambient_nominal_C
    return Leakage(voltage, case, figure, leakage_band(stage, voltage, warm))


def _drops(record: Record, stage: Stage, when: When) -> Iterator[ClampDrop]:
    below, zeros = f"clamp/{when}/drop/", f"clamp/{when}/zero-drop"
    current_zero = zero_of(record, zeros, "exposed_current", below)
    guarded_zero = zero_of(record, zeros, "guarded_voltage", below)
    for step in record.steps(below):
        read = {
            point: record.at(step, point)
            for point in ("exposed_current", "guarded_voltage", "exposed_voltage")
        }
        if not all(read.values()):
            continue
        target = float(step.rpartition("/")[2])
        current = figure_of(record, "exposed_current", read["exposed_current"], current_zero, -1,
                            step)  # fmt: skip
        guarded = figure_of(record, "guarded_voltage", read["guarded_voltage"], guarded_zero, -1,
                            step)  # fmt: skip
        case = float(np.interp(read["guarded_voltage"][-1].time_s, *temperatures(record, "case")))
        warm = case if math.isfinite(case) else stage.file.stage.ambient_nominal_C
        loss = max(guarded.value, 0.0) * max(current.value, 0.0)
        junction = min(warm + stage.junction_to_case_K_per_W * loss, 200.0)
        band = drop_band(stage, target, junction)
        yield ClampDrop(
            target, current, -mean(read["exposed_voltage"]),
            _carried(stage, guarded, current, target, junction, band), case, junction, band,
        )  # fmt: skip


def _carried(
    stage: Stage, guarded: Figure, current: Figure, target_A: float, junction_C: float,
    band: DropBand,
) -> Figure:  # fmt: skip
    """To exactly the target current along the law, where anything like it flows."""
    if not FLOWS * target_A <= current.value <= target_A / FLOWS:
        return guarded
    at = drop_band(stage, current.value, junction_C)
    moved = at.drop.nominal - band.drop.nominal
    return Figure(
        guarded.value - moved,
        Budget([
            *guarded.budget.components,
            *(Budget.linear([(-at.slope_ohm, current.budget)]).components),
            rectangular("carried to the exact current", CARRIED_SHARE * moved),
        ]),
    )  # fmt: skip


@dataclass(frozen=True)
class Change:
    """After less before, of the drop (V) at ``current_A``, or of the leakage (A) where None."""

    current_A: float | None
    change: Figure


def changes(before: ClampState, after: ClampState) -> Iterator[Change]:
    """Of everything that was read twice. One meter on one range has the same gain in both; what
    stays is noise, how far zeros move, and how warm the junction was."""
    for one in before.drops:
        for two in after.drops:
            if one.target_A == two.target_A:
                warmer = one.band.per_K * (two.junction_C - one.junction_C)
                budget = Budget.linear([(1.0, two.drop.budget), (-1.0, one.drop.budget)])
                yield Change(one.target_A, Figure(
                    two.drop.value - one.drop.value - warmer,
                    Budget([
                        *budget.components,
                        rectangular("junction temperature, before against after",
                                    one.band.per_K * TEMPERATURE_K),
                    ]),
                ))  # fmt: skip
    if before.leakage is not None and after.leakage is not None:
        first, second = before.leakage.leakage, after.leakage.leakage
        yield Change(None, Figure(
            second.value - first.value,
            Budget.linear([(1.0, second.budget), (-1.0, first.budget)]),
        ))  # fmt: skip


def figure_of(
    record: Record, point: PointName, readings: Sequence[Reading], zero: Zero, sign: int, step: str
) -> Figure:
    """The mean of readings on one range, times ``sign``, the zero taken off where it can be."""
    bench, table = record.bench, record.bench.points[point]
    scale = 1 / (table.shunt_ohm or 1.0)
    most = max(r.range for r in readings)
    values = np.array([r.value for r in readings if r.range == most])
    value = sign * float(values.mean() - zero.value * zero.used)
    own, known = max(values.size - 1, 0), zero.noise_dof if math.isfinite(zero.noise_dof) else 0.0
    dof = max(own + known, 1.0)
    noise = math.sqrt((float(((values - values.mean()) ** 2).sum()) + known * zero.noise**2) / dof)
    components = [
        gain(bench, point, most, value),
        Component(f"noise of {point} ({step})", noise / math.sqrt(values.size), dof=dof),
    ]
    if table.shunt_ohm is not None:
        tolerance = value * table.shunt_tolerance_percent / 100
        components.append(rectangular("shunt tolerance", tolerance))
    if zero.used:
        kind = step.split("/")[1]
        components += [
            Component(f"zero of {point} ({kind})", zero.u, dof=zero.dof),
            rectangular(f"drift of the zero of {point} ({kind})", zero.drift),
        ]
    else:
        limit = accuracy_of(bench, point, most).offset_limit()
        components.append(rectangular(f"offset of {point}, not zeroed", limit * scale))
    return Figure(value, Budget(c for c in components if c.u != 0.0))


def mean(readings: Sequence[Reading]) -> float:
    """Of the values."""
    return float(np.mean([r.value for r in readings]))
