"""What a trial did to the forward drop: after less before, at the same current.

Both are read by one meter on one range, so its gain, its offset, the shunt and the fixture are the
same error in both and leave the difference. What stays is noise, how far the zeros move, and the
junction's temperature, which is never the same twice.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from benchkit.evaluation.sources import accuracy_of, flow_of, gain, rectangular
from benchkit.evaluation.sweep import Sweep, local_slope, temperatures
from benchkit.metrology import Budget, Component
from benchkit.prediction.forward import forward
from benchkit.records.record import Record
from benchkit.stage import Stage

TEMPERATURE_K = 0.3
"""How well two readings of the case say how far two junctions were apart (judgement)."""
SETTLING_SHARE = 0.15
"""Of the junction's rise above the case, what may still be settling at one reading and not at the
other, because another current went before (judgement)."""
COEFFICIENT_SHARE = 0.2
"""Relative limit of error of the datasheet's temperature coefficient (judgement)."""
RECONNECTED = 0.2
"""Of the fixture's tolerance inside the Kelvin taps, what connecting the leads anew may move
(judgement)."""
STEP_K = 10.0
HOTTEST_C = 250.0
"""Where the laws of the parts end."""


@dataclass(frozen=True)
class DropChange:
    """Both drops at exactly ``current_A``; the change is at the temperature of the first."""

    current_A: float
    before_V: float
    after_V: float
    before_C: float
    after_C: float
    change_V: float
    budget: Budget


def owed_currents(
    record: Record, sweep: Sweep | None, changes: Sequence[DropChange]
) -> list[float]:
    """Currents at which the drop should have been measured again, and was not: of those that the
    sweep reached the lowest, the one nearest to the nominal, and the highest."""
    planned, nominal = record.stage.sweep.currents_A, record.stage.stage.current_nominal_A
    nearest = min(planned, key=lambda amps: abs(amps - nominal))
    reached = sweep.targets if sweep is not None else planned
    done = [change.current_A for change in changes]
    return [
        amps for amps in sorted({planned[0], nearest, planned[-1]} & set(reached))
        if not any(abs(amps / other - 1) < 1e-9 for other in done)
    ]  # fmt: skip


def drop_changes(record: Record, stage: Stage, sweep: Sweep) -> Iterator[DropChange]:
    """One for each current measured again that the sweep had visited on its way up, rising."""
    flow = flow_of(record.stage)
    for name in sorted(record.steps("after/"), key=lambda name: float(name.partition("/")[2])):
        amps = float(name.partition("/")[2])
        drops, currents = record.at(name, "drop"), record.at(name, "exposed_current")
        chosen = sweep.visits(amps) & sweep.rising
        if not drops or not currents or not chosen.any():
            continue
        drop_zero, current_zero = sweep.drop_zero, sweep.current_zero
        read_A = float(np.mean([r.value for r in currents]))
        read_A = flow * (read_A - (current_zero.value if current_zero.used else 0.0))
        read_V = float(np.mean([r.value for r in drops]))
        read_V = flow * (read_V - (drop_zero.value if drop_zero.used else 0.0))
        read_V -= record.bench.points["drop"].lead_ohm * read_A
        slope = local_slope(sweep, amps)
        after = read_V - slope * (read_A - amps)
        carried = sweep.drop_V[chosen] - slope * (sweep.current_A[chosen] - amps)
        before, case = float(carried.mean()), float(sweep.case_C[chosen].mean())
        at_s = float(np.mean([r.time_s for r in drops]))
        later = float(np.interp(at_s, *temperatures(record, "case")))
        per_K = _per_kelvin(stage, amps, before, case)
        warmer = later - case
        change = after - before - per_K * warmer
        above = stage.junction_to_case_K_per_W * abs(before * amps)
        unsure = TEMPERATURE_K + SETTLING_SHARE * above + COEFFICIENT_SHARE * abs(warmer)
        counts = 1 / math.sqrt(1 / len(drops) + 1 / int(chosen.sum()))
        components = [
            *_instruments(record, sweep, drops[0].range, change, after, slope, counts),
            rectangular("junction temperature, before against after", per_K * unsure),
            rectangular(
                "leads connected anew",
                RECONNECTED * record.bench.points["drop"].lead_tolerance_ohm * amps,
            ),
        ]
        budget = Budget(c for c in components if c.u != 0.0)
        yield DropChange(amps, before, after, case, later, change, budget)


def _per_kelvin(stage: Stage, amps: float, drop_V: float, case_C: float) -> float:
    """dV/dT in V/K where this part was measured: a typical one's, in proportion to the drop where
    it is a channel's, whose resistance has it."""
    junction = min(case_C + stage.junction_to_case_K_per_W * drop_V * amps, HOTTEST_C - STEP_K)
    warm = np.array([junction, junction + STEP_K])
    supply = stage.file.stage.supply_nominal_V
    volts = forward(stage, stage.typical(), amps, supply, warm).drop_V[0]
    like = drop_V / float(volts[0]) if stage.conducts == "channel" else 1.0
    return like * float(volts[1] - volts[0]) / STEP_K


def _instruments(
    record: Record, sweep: Sweep, range_V: float, change: float, after: float, slope: float,
    counts: float,
) -> Iterator[Component]:  # fmt: skip
    """What the meter adds; ``counts`` is the root of how many readings each mean is worth."""
    bench, zero, current = record.bench, sweep.drop_zero, sweep.current_zero
    yield Component("noise of drop readings", zero.noise / counts, dof=zero.noise_dof)
    yield Component(
        "noise of current readings", slope * current.noise / counts, dof=current.noise_dof
    )
    # The zeros show half of how far they moved; the trial lies beyond the second of them.
    yield rectangular("drift of the zero of drop", 2 * zero.drift)
    yield rectangular("drift of the zero of exposed_current", 2 * slope * current.drift)
    offset = accuracy_of(bench, "drop", sweep.drop_range_V).offset_limit()
    if range_V == sweep.drop_range_V:
        yield gain(bench, "drop", range_V, change)
        if not math.isfinite(zero.noise_dof):
            yield rectangular("offset of drop, no zero taken", offset)
        return
    yield gain(bench, "drop", range_V, after)
    yield gain(bench, "drop", sweep.drop_range_V, change - after)
    other = accuracy_of(bench, "drop", range_V).offset_limit()
    yield rectangular("offsets of two ranges of drop", offset + other)
