"""Records of a battery trial, written by hand, and what is judged of them."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from pathlib import Path

from benchkit.evaluation.battery_trial_circuits import FLAT
from benchkit.evaluation.battery_trial_judged import BatteryFound, judge_battery_trial
from benchkit.evaluation.part import Part
from benchkit.evaluation.promised import Promised
from benchkit.files import BenchFile
from benchkit.files.loading import parse
from benchkit.reading import POINT_UNITS, Reading
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.stage import Stage
from procedures.starters import starter
from tests.benchkit.nine_stages import made

TRIAL = '[battery_trial]\ndwell_s = 2.0\nscenarios = ["{}"]\n'
SENSED_A = (15.0 - 0.6) / 47e3
"""Through base resistor and protecting diode."""
ZERO_A = 2e-4
"""What the meter's offset reads as a current: taken off by the zeros."""
Rows = Mapping[float, tuple[float, float]]


@cache
def stage_of(topology: str, state: str, stage: str = "", tables: str = "") -> Stage:
    return made(topology, 'guards = "supply"\n' + stage, TRIAL.format(state) + tables)


@cache
def bench() -> BenchFile:
    return parse(BenchFile, starter("bench.toml"), "bench.toml")


def record_of(
    stage: Stage, state: str, rows: Rows, *events: tuple[str, str], dwell: bool = True
) -> Record:
    """rows: by the stand-in's voltage, exposed current (A, into plus) and guarded voltage (V).
    events: kind and text, after the readings."""
    readings: list[tuple[str, Reading]] = []
    told: list[dict[str, object]] = [
        {"kind": "step", "text": f"battery/leads/{state}", "time_s": 1.0}
    ]

    def read(step: str, point: str, value: float, range_V: float) -> None:
        at = 2.0 + 0.1 * len(readings)
        readings.append((step, Reading(at, point, value, POINT_UNITS[point], 0.0, range_V, "ok")))

    for k in range(8):
        read(f"zero/battery/{state}", "exposed_current", ZERO_A + 1e-6 * (-1) ** k, 0.1)
        read(f"zero/battery/{state}", "guarded_voltage", 1e-5 * (-1) ** k, 100.0)
    for volts, (amps, guarded) in rows.items():
        steps = [f"battery/{state}/{volts!r}"] * 4
        steps += [f"battery/{state}/dwell"] * 8 * (dwell and state != FLAT)
        for k, step in enumerate(steps):
            read(step, "exposed_current", amps + ZERO_A + 1e-6 * (-1) ** k, 0.1)
            read(step, "guarded_voltage", guarded + 1e-5 * (-1) ** k, 100.0)
            read(step, "case", 25.0, 0.0)
    for kind, text in events:
        told.append({"kind": kind, "text": text, "time_s": 90.0, "step": f"battery/{state}/x"})
    told.append({"kind": "step", "text": "leads put back", "time_s": 99.0})
    return Record(Path("nowhere"), bench(), stage.file, tuple(readings), tuple(told))


def judged(stage: Stage, record: Record) -> Part:
    promise = Promised(stage, stage.typical(), None, None, ())
    part = judge_battery_trial(record, promise)
    assert part is not None
    return part


def told(part: Part) -> list[tuple[str, str]]:
    return [(remark.weight, remark.text) for remark in part.remarks]


def answer(part: Part) -> str:
    assert isinstance(part.detail, BatteryFound)
    [found] = part.detail.states
    return found.answer


def row(part: Part, name: str) -> Measurand:
    return next(row for row in part.rows if row.name == name)
