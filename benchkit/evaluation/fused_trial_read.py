"""The burst of a fused trial, taken apart: when the current came, when the fuse had cleared it, and
what went through meanwhile."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.reverse import Figure
from benchkit.evaluation.sources import accuracy_of, gain, rectangular
from benchkit.evaluation.sweep import Zero
from benchkit.evaluation.trial_zero import zero_of
from benchkit.files.bench import PointName
from benchkit.metrology import Budget, Component
from benchkit.reading import Reading
from benchkit.records.record import Record

Floats = NDArray[np.float64]

BURST = "fused/burst"
HALF = 0.5
"""An edge is where the current passes this share of its plateau."""


@dataclass(frozen=True)
class Trace:
    """One point of the burst; both arrays (samples,), values with their sign turned, so that
    what flows and stands the wrong way round is positive. lost: how many readings overloaded."""

    time_s: Floats
    value: Floats
    range_V: float
    lost: int


@dataclass(frozen=True)
class Pulse:
    """What one burst shows.

    onset_s: when the current came. clears: from then until it was over, in s; None where it never
    was. let_through: in A2s. current: its plateau. peak: the furthest that the guarded port was
    below zero, in V. late: that the current was there before the first reading.
    """

    onset_s: float
    clears: Figure | None
    let_through: Figure | None
    current: Figure
    peak: Figure | None
    lasted_s: float
    late: bool
    lost: int


@dataclass(frozen=True)
class Burst:
    """As recorded; pulse: None where no current flowed."""

    current: Trace
    guarded: Trace | None
    pulse: Pulse | None


def read_burst(record: Record) -> Burst | None:
    """None where nothing was recorded."""
    asked = record.stage.fused_trial
    current = _trace(record, "exposed_current")
    if current is None or asked is None or current.time_s.size < 2:
        return None
    guarded = _trace(record, "guarded_voltage")
    return Burst(current, guarded, _pulse(record, current, guarded, asked.current_A))


def _trace(record: Record, point: PointName) -> Trace | None:
    """On the largest range: the guard reads nothing by these meters meanwhile."""
    every: list[Reading] = [r for step, r in record.readings if step == BURST and r.point == point]
    usable = [r for r in every if r.usable]
    if not usable:
        return None
    order = np.argsort([r.time_s for r in usable], kind="stable")
    return Trace(
        np.array([usable[k].time_s for k in order]), -np.array([usable[k].value for k in order]),
        max(r.range for r in usable), len(every) - len(usable),
    )  # fmt: skip


def _pulse(record: Record, current: Trace, guarded: Trace | None, asked_A: float) -> Pulse | None:
    zero = zero_of(record, "fused/zero", "exposed_current", BURST)
    amps = current.value + zero.value * zero.used
    flowing = amps > HALF * min(asked_A, float(amps.max()))
    if amps.max() < 0.05 * asked_A:
        return None
    first = int(np.argmax(flowing))
    over = np.flatnonzero(~flowing[first:])
    end = first + int(over[0]) if over.size else amps.size
    step_s = float(np.median(np.diff(current.time_s)))
    inside = slice(first, end)
    plateau = _plateau(record, current, amps[inside], zero)
    onset = current.time_s[first] - 0.5 * (
        current.time_s[first] - current.time_s[first - 1] if first else step_s
    )
    cleared = bool(over.size)
    clears = through = None
    if cleared:
        last = 0.5 * (current.time_s[end] + current.time_s[end - 1])
        clears = Figure(float(last - onset), Budget(_edges(step_s, 1.0)))
        through = _let_through(amps[inside], clears, plateau, step_s)
    return Pulse(
        float(onset), clears, through, plateau, _peak(record, guarded),
        float(current.time_s[min(end, amps.size - 1)] - onset), first == 0, current.lost,
    )  # fmt: skip


def _edges(step_s: float, weight: float) -> list[Component]:
    """Each edge lies somewhere between two readings."""
    return [
        rectangular("onset between two readings", weight * 0.5 * step_s),
        rectangular("end between two readings", weight * 0.5 * step_s),
    ]


def _plateau(record: Record, trace: Trace, amps: Floats, zero: Zero) -> Figure:
    """The mean current while it flowed."""
    bench, table = record.bench, record.bench.points["exposed_current"]
    value, ohms = float(amps.mean()), table.shunt_ohm or 1.0
    spread = float(amps.std(ddof=1)) if amps.size > 1 else 0.0
    components = [
        gain(bench, "exposed_current", trace.range_V, value),
        rectangular("shunt tolerance", value * table.shunt_tolerance_percent / 100),
        Component("scatter of the current", spread / math.sqrt(amps.size),
                  dof=max(amps.size - 1, 1)),
    ]  # fmt: skip
    if zero.used:
        components += [
            Component("zero of exposed_current", zero.u, dof=zero.dof),
            rectangular("drift of the zero of exposed_current", zero.drift),
        ]
    else:
        limit = accuracy_of(bench, "exposed_current", trace.range_V).offset_limit()
        components.append(rectangular("offset of exposed_current, not zeroed", limit / ohms))
    return Figure(value, Budget(c for c in components if c.u != 0.0))


def _let_through(amps: Floats, clears: Figure, plateau: Figure, step_s: float) -> Figure:
    """The mean square while it flowed, over the time between the edges."""
    square = float(np.mean(np.square(amps)))
    per_A = 2 * plateau.value * clears.value
    scaled = Budget.linear([(per_A, plateau.budget)])
    return Figure(
        square * clears.value, Budget([*_edges(step_s, plateau.value**2), *scaled.components])
    )


def _peak(record: Record, trace: Trace | None) -> Figure | None:
    """The largest single reading of the guarded port below zero."""
    if trace is None:
        return None
    bench = record.bench
    zero = zero_of(record, "fused/zero", "guarded_voltage", BURST)
    value = float(trace.value.max()) + zero.value * zero.used
    near = np.sort(trace.value[trace.value > HALF * value])
    # From one reading to the next: a slow change is no noise.
    inside = trace.value[trace.value > HALF * value]
    noise = float(np.diff(inside).std(ddof=1)) / math.sqrt(2) if near.size > 2 else zero.noise
    steepest = float(np.abs(np.diff(inside)).max()) if inside.size > 1 else 0.0
    components = [
        gain(bench, "guarded_voltage", trace.range_V, value),
        rectangular("between two readings it may have been higher", steepest),
        Component("noise of one reading of guarded_voltage", noise, dof=max(near.size - 2, 1)),
    ]
    if zero.used:
        components += [
            Component("zero of guarded_voltage", zero.u, dof=zero.dof),
            rectangular("drift of the zero of guarded_voltage", zero.drift),
        ]
    else:
        limit = accuracy_of(bench, "guarded_voltage", trace.range_V).offset_limit()
        components.append(rectangular("offset of guarded_voltage, not zeroed", limit))
    return Figure(value, Budget(c for c in components if c.u != 0.0))
