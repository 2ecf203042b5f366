"""The trial in the wrong direction, taken apart: what each rung of the ladder let through, and what
the trial did to the forward drop."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.drop_change import DropChange, drop_changes, owed_currents
from benchkit.evaluation.sources import accuracy_of, gain, rectangular
from benchkit.evaluation.sweep import Sweep, Zero, temperatures
from benchkit.evaluation.trial_zero import zero_of
from benchkit.files.bench import PointName
from benchkit.metrology import Budget, Component
from benchkit.reading import Reading
from benchkit.records.record import Record
from benchkit.stage import Stage

Floats = NDArray[np.float64]

CLAMPS = ("clamp", "fused-clamp")
TAIL = 4
"""A dwell is judged by its last so many readings."""
DWELT = 0.8
"""A dwell counts as kept from this share of it on, less two looks."""
SAME = 1e-6


@dataclass(frozen=True)
class Figure:
    """A value with where its uncertainty comes from."""

    value: float
    budget: Budget


@dataclass(frozen=True)
class Rung:
    """One reverse voltage that was applied.

    voltage_V: at the exposed port, as measured, without its sign. leakage: out of the exposed plus
    terminal, in A. guarded: how far below zero the guarded port was, in V. peak_leakage,
    peak_guarded: the largest of the single readings, of a dwell those of all of it. looks: of how
    many readings these are the largest.
    """

    target_V: float
    voltage_V: float
    case_C: float
    leakage: Figure
    guarded: Figure
    peak_leakage: Figure
    peak_guarded: Figure
    looks: int


@dataclass(frozen=True)
class Trial:
    """A trial in reverse, or as much of it as there is.

    rungs: rising, without the dwell. last: at the full voltage, at the end of its dwell; None where
    that was not reached. short: what is missing, in words; "" when it is whole. trips: what the
    guard said when it ended the trial.
    """

    full_V: float
    dwell_s: float
    """As the stage file asks, or as long as it lasted where that was less."""
    rungs: tuple[Rung, ...]
    last: Rung | None
    changes: tuple[DropChange, ...]
    current_zero: Zero
    guarded_zero: Zero
    trips: tuple[str, ...]
    short: str


def read_trial(record: Record, stage: Stage, sweep: Sweep | None) -> Trial | None:
    """Take a record's trial apart; None when its stage file has no [reverse] table."""
    settings, bench = record.stage.reverse, record.bench
    if settings is None or record.stage.stage.topology in CLAMPS:
        return None
    full = settings.voltage_V or record.stage.stage.supply_max_V
    zeros = {
        "exposed_current": zero_of(record, "zero/reverse", "exposed_current", "reverse/"),
        "exposed_voltage": zero_of(record, "zero/reverse", "exposed_voltage", "reverse/"),
        "guarded_voltage": zero_of(record, "zero/reverse", "guarded_voltage", "reverse/"),
    }
    ladder = [name for name in record.steps("reverse/") if name != "reverse/dwell"]
    found = [
        _rung(record, zeros, name, float(name.partition("/")[2]), whole=True) for name in ladder
    ]
    rungs = tuple(sorted((r for r in found if r is not None), key=lambda r: r.target_V))
    reached = bool(rungs) and abs(rungs[-1].target_V / full - 1) < SAME
    dwell = _rung(record, zeros, "reverse/dwell", full, whole=False)
    last = (dwell or rungs[-1]) if reached else None
    lasted = _dwelt_s(record)
    kept = lasted >= DWELT * settings.dwell - 2 * bench.bench.poll_s and (
        dwell or not settings.dwell
    )
    changes = tuple(drop_changes(record, stage, sweep)) if sweep is not None else ()
    if not rungs:
        short = "; ".join(["it did not take place", *record.said("reverse-skipped")])
    elif last is None:
        short = f"it reached {rungs[-1].target_V:g} V of {full:g} V"
    elif not kept:
        short = f"{full:g} V stayed for {lasted:.0f} s of {settings.dwell:g} s"
    else:
        owed = owed_currents(record, sweep, changes)
        at = " and ".join(f"{amps:g} A" for amps in owed)
        short = f"the drop was not measured again after it, at {at}" if owed else ""
    trips = tuple(_trips(record))
    return Trial(
        full, settings.dwell if kept else lasted, rungs, last, changes, zeros["exposed_current"],
        zeros["guarded_voltage"], trips, short,
    )  # fmt: skip


def _trips(record: Record) -> Iterator[str]:
    """What the guard said when it ended the trial: while the leads were crossed for it."""
    inside = False
    for event in record.events:
        kind, text = event.get("kind"), str(event.get("text", ""))
        if kind == "step" and text in ("leads crossed", "leads put back"):
            inside = text == "leads crossed"
        if kind == "trip" and inside:
            yield text


def _dwelt_s(record: Record) -> float:
    """From the step's begin, where that is recorded, to its last reading."""
    times = [r.time_s for r in record.at("reverse/dwell", "exposed_current")]
    for event in record.events:
        if event.get("kind") == "step" and event.get("text") == "reverse/dwell":
            times.insert(0, float(str(event["time_s"])))
    return max(times) - min(times) if times else 0.0


def _rung(
    record: Record, zeros: dict[str, Zero], name: str, target_V: float, *, whole: bool
) -> Rung | None:
    """None when a voltage or the current was not read; of a dwell the last readings, but for its
    peaks."""
    points: tuple[PointName, ...] = ("exposed_voltage", "exposed_current", "guarded_voltage")
    read = [_on_one_range(record.at(name, point)) for point in points]
    if not all(read):
        return None
    exposed, current, guarded = read if whole else (readings[-TAIL:] for readings in read)
    peak_leakage, peak_guarded = (
        _figure(record, point, [min(readings, key=lambda r: r.value)], zeros[point])
        for point, readings in zip(points[1:], read[1:], strict=True)
    )
    zero = zeros["exposed_voltage"]
    voltage = zero.value * zero.used - _mean(exposed)
    case = np.interp(current[-1].time_s, *temperatures(record, "case"))
    leakage = _figure(record, "exposed_current", current, zeros["exposed_current"])
    # Nothing is carried to the stated voltage: what its departure can do is allowed for.
    beside = leakage.value * (voltage / target_V - 1)
    parts = [*leakage.budget.components, rectangular("voltage not exactly as stated", beside)]
    return Rung(
        target_V, voltage, float(case),
        Figure(leakage.value, Budget(c for c in parts if c.u != 0.0)),
        _figure(record, "guarded_voltage", guarded, zeros["guarded_voltage"]),
        peak_leakage, peak_guarded, max(len(readings) for readings in read),
    )  # fmt: skip


def _figure(record: Record, point: PointName, readings: list[Reading], zero: Zero) -> Figure:
    """The mean of the readings with its sign turned, the zero taken off where it can be."""
    bench, table = record.bench, record.bench.points[point]
    scale = 1 / (table.shunt_ohm or 1.0)
    values = np.array([r.value for r in readings])
    range_V = readings[0].range
    value = float(zero.value * zero.used - values.mean())
    own = max(values.size - 1, 0)
    known = zero.noise_dof if math.isfinite(zero.noise_dof) else 0.0
    dof = max(own + known, 1.0)
    noise = math.sqrt((float(((values - values.mean()) ** 2).sum()) + known * zero.noise**2) / dof)
    steps = np.diff(np.unique([r.value for r in record.at("reverse/", point)]))
    components = [
        gain(bench, point, range_V, value),
        rectangular("shunt tolerance", value * table.shunt_tolerance_percent / 100),
        Component(f"noise of a reading of {point}", noise / math.sqrt(values.size), dof=dof),
        rectangular(f"resolution of {point}", 0.5 * float(steps.min()) if steps.size else 0.0),
    ]
    if zero.used:
        components += [
            Component(f"zero of {point}", zero.u, dof=zero.dof),
            rectangular(f"drift of the zero of {point}", zero.drift),
        ]
    else:
        limit = accuracy_of(bench, point, range_V).offset_limit()
        components.append(rectangular(f"offset of {point}, not zeroed", limit * scale))
    return Figure(value, Budget(c for c in components if c.u != 0.0))


def _on_one_range(readings: list[Reading]) -> list[Reading]:
    """Those on the largest range: each range has errors of its own."""
    most = max((r.range for r in readings), default=0.0)
    return [r for r in readings if r.range == most]


def _mean(readings: list[Reading]) -> float:
    return float(np.mean([r.value for r in readings]))
