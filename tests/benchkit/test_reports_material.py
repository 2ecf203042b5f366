"""Made-up run records that the report tests share, and that they are what they should be.

Readings come from a stage's own law with a scale on it, so no bench, simulated or real, is needed.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from benchkit.evaluation.evaluate import Evaluation, evaluate
from benchkit.files import StageFile, load
from benchkit.harness import REVERSED as REVERSED_HARNESS
from benchkit.prediction.forward import forward
from benchkit.records.record import Record, read_record
from benchkit.records.run_folder import COLUMNS
from benchkit.stage import build_stage

BENCH = """
[bench]
name = "Bench <2> & shelf"
voltage_max_V = 32.0
current_max_A = 10.0
power_max_W = 150.0
[instruments.supply]
kind = "supply"
resource = "TCPIP::10.9.8.1::5025::SOCKET"
dialect = "supply-list"
identity = "Harrowgate,PS-32"
calibration_due = 2027-06-30
[instruments.load]
kind = "load"
resource = "TCPIP::10.9.8.2::5025::SOCKET"
dialect = "load-plain"
identity = "Harrowgate,EL-150"
calibration_due = 2027-06-30
[instruments.meter]
kind = "meter"
resource = "TCPIP::10.9.8.3::5025::SOCKET"
dialect = "meter-scan"
identity = "Quillmere,SM-6"
calibration_due = 2026-01-31
voltage = [
  { range_V = 0.1, reading_percent = 0.005, range_percent = 0.0035 },
  { range_V = 1.0, reading_percent = 0.004, range_percent = 0.0007 },
  { range_V = 100.0, reading_percent = 0.0045, range_percent = 0.0006 },
]
[instruments.thermometer]
kind = "thermometer"
resource = "TCPIP::10.9.8.4::5025::SOCKET"
dialect = "thermometer-scan"
identity = "Quillmere,TH-8"
calibration_due = 2027-06-30
temperature = { offset_K = 0.5, reading_percent = 0.2 }
[points.drop]
instrument = "meter"
lead_ohm = 0.0006
lead_tolerance_ohm = 0.0003
thermoelectric_V_per_K = 2e-7
[points.exposed_voltage]
instrument = "meter"
[points.guarded_voltage]
instrument = "meter"
[points.exposed_current]
instrument = "meter"
shunt_ohm = 0.01
shunt_tolerance_percent = 0.1
[points.case]
instrument = "thermometer"
[points.ambient]
instrument = "thermometer"
"""

CHANNEL = """
[stage]
name = "Tide gauge logger, <input> stage"
topology = "pmos-pass"
supply_min_V = 9.0
supply_nominal_V = 12.0
supply_max_V = 15.0
current_nominal_A = 3.0
current_max_A = 5.0
ambient_max_C = 60.0
[parts.Q1]
kind = "p-mosfet"
on_resistance = [
  { gate_V = 4.5, current_A = 5.0, typ_ohm = 0.030, max_ohm = 0.040 },
  { gate_V = 10.0, current_A = 5.0, typ_ohm = 0.019, max_ohm = 0.025 },
  { gate_V = 10.0, current_A = 5.0, typ_ohm = 0.028, junction_C = 125.0 },
]
threshold = { min_V = 1.0, max_V = 2.5, typ_V = 1.7, current_A = 250e-6 }
body_diode = [{ current_A = 5.0, typ_V = 0.85, max_V = 1.1 }]
drain_source_max_V = 30.0
gate_source_max_V = 20.0
drain_current_max_A = 10.0
junction_max_C = 150.0
junction_to_case_K_per_W = 4.0
[heat]
case_to_ambient_K_per_W = 45.0
case_to_ambient_max_K_per_W = 60.0
time_constant_s = 40.0
[sweep]
currents_A = [0.1, 0.2, 0.5, 1.0, 2.0, 3.0, 4.0, 5.0]
[soak]
current_A = 4.0
[limits]
drop = [{ current_A = 3.0, max_V = 0.085 }, { current_A = 5.0, max_V = 0.15 }]
case_max_C = 115.0
junction_margin_min_K = 30.0
"""

JUNCTION = """
[stage]
name = "Beacon charger input"
topology = "series-diode"
supply_min_V = 9.0
supply_nominal_V = 12.0
supply_max_V = 15.0
current_nominal_A = 3.0
current_max_A = 5.0
ambient_max_C = 50.0
[parts.D1]
kind = "diode"
technology = "schottky"
forward = [
  { current_A = 0.1, typ_V = 0.29, max_V = 0.34 },
  { current_A = 1.0, typ_V = 0.36, max_V = 0.42 },
  { current_A = 5.0, typ_V = 0.48, max_V = 0.55 },
  { current_A = 5.0, typ_V = 0.40, max_V = 0.48, junction_C = 125.0 },
]
leakage = [{ reverse_V = 40.0, typ_A = 50e-6, max_A = 500e-6 }]
reverse_voltage_max_V = 40.0
average_current_max_A = 8.0
junction_max_C = 150.0
junction_to_case_K_per_W = 3.0
[heat]
case_to_ambient_K_per_W = 20.0
case_to_ambient_max_K_per_W = 26.0
time_constant_s = 45.0
[sweep]
currents_A = [0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 3.0, 5.0]
[soak]
current_A = 4.0
[limits]
drop = [{ current_A = 3.0, max_V = 0.46 }]
case_max_C = 110.0
"""

REVERSED = CHANNEL.replace(
    "[limits]\n",
    "[reverse]\nsteps = 3\ndwell_s = 6.0\n[limits]\n"
    "leakage_max_A = 1e-3\nguarded_reverse_max_V = 0.5\n",
).replace(
    "[parts.Q1]\n",
    "[parts.Q1]\nleakage = [{ reverse_V = 24.0, typ_A = 20e-9, max_A = 1e-6 }]\n",
)
"""The channel's stage with a trial in reverse: 5, 10 and 15 V, and 15 V for 6 s."""

MANIFEST: Mapping[str, object] = {
    "schema": 1,
    "status": "finished",
    "operator": "M. Oduya <bench>",
    "clock": "simulated",
    "bench": "Bench <2> & shelf",
    "started": "2026-03-02T09:15:00.000Z",
    "ended": "2026-03-02T09:24:11.000Z",
    "versions": {"benchkit": "0.1.0", "python": "3.11.9", "numpy": "2.4.6"},
    "instruments": {
        "supply": {
            "identity": "Harrowgate,PS-32,00418,1.07", "dialect": "supply-list",
            "calibration_due": "2027-06-30", "resource": "TCPIP::10.9.8.1::5025::SOCKET",
        },
        "meter": {
            "identity": "Quillmere,SM-6,<7731>,2.2", "dialect": "meter-scan",
            "calibration_due": "2026-01-31", "resource": "TCPIP::10.9.8.3::5025::SOCKET",
        },
    },
}  # fmt: skip


@dataclass(frozen=True)
class Reversal:
    """What is to be recorded of a trial in reverse. series_ohm: from the exposed to the guarded
    port, which has 200 kilohms across it. across_ohm: across the exposed port."""

    series_ohm: float = 1e9
    across_ohm: float = 1e12
    rungs: tuple[float, ...] = (5.0, 10.0, 15.0)
    dwell: int = 6
    zero: bool = True
    after: float = 1.0
    """Drop after the trial, as a share of the one before."""
    currents: tuple[float, ...] = (0.1, 3.0, 5.0)


@dataclass(frozen=True)
class Board:
    """What is to be recorded: a board's law is the sheet's typical one, times ``scale``."""

    stage: str = CHANNEL
    scale: float = 1.0
    resistance_K_per_W: float = 44.0
    currents: int | None = None
    """How many currents of the sweep were reached; None for all."""
    soak_s: float = 240.0
    """0 for none."""
    seed: int = 1
    bench: str = BENCH
    events: tuple[tuple[str, str], ...] = ()
    reversal: Reversal | None = None
    trip: str = ""
    """What the guard says at the last rung."""


class _Log:
    """Rows of readings.csv and lines of events.jsonl as they come."""

    def __init__(self, seed: int, range_V: str) -> None:
        self.now = 0.0
        self._range_V = range_V
        self.rows: list[tuple[str, ...]] = []
        self.lines: list[dict[str, object]] = []
        self._noise = np.random.default_rng(seed)

    def volts(self, step: str, point: str, value: float, sigma: float, unit: str = "V") -> None:
        full = "0.1" if unit == "A" else self._range_V
        noisy = value + float(self._noise.normal(0.0, sigma))
        self._row(step, point, noisy, unit, full, sigma)

    def level(self, step: str, point: str, value: float) -> None:
        """A port's voltage, with an offset of the meter in it."""
        self._row(step, point, value + 2e-4 + float(self._noise.normal(0.0, 2e-5)), "V", "100.0",
                  1e-4)  # fmt: skip

    def degrees(self, step: str, point: str, value: float) -> None:
        self._row(step, point, value + float(self._noise.normal(0.0, 0.02)), "C", "200.0", 0.3)

    def event(self, kind: str, text: str, **facts: object) -> None:
        self.lines.append({"at": "2026-03-02T09:16:00.000Z", "kind": kind, "text": text, **facts})

    def _row(self, step: str, point: str, value: float, unit: str, full: str, u: float) -> None:
        self.rows.append(
            (repr(round(self.now, 4)), step, point, repr(value), unit, repr(u), full, "ok")
        )


def record(folder: Path, board: Board) -> Record:
    """Write a run folder of ``board`` (no result, no report, no manifest) and read it back."""
    inputs = folder / "inputs"
    inputs.mkdir(parents=True)
    (inputs / "bench.toml").write_text(board.bench, encoding="utf-8")
    (inputs / "stage.toml").write_text(board.stage, encoding="utf-8")
    file = load(StageFile, inputs / "stage.toml")
    stage = build_stage(file, "stage.toml")
    supply, ambient, lag = file.stage.supply_nominal_V, 23.8, stage.junction_to_case_K_per_W
    log = _Log(board.seed, "0.1" if file.stage.topology == "pmos-pass" else "1.0")

    soak_A = file.soak.current_A if file.soak is not None else 0.0
    warmth = np.linspace(ambient, 200.0, 30)
    tables = {
        amps: board.scale * forward(stage, stage.typical(), amps, supply, warmth).drop_V[0]
        for amps in {*file.sweep.currents_A, soak_A} - {0.0}
    }

    def drop(current_A: float, case_C: float) -> float:
        """Measured drop: law at the junction's temperature, plus what the fixture adds."""
        volts = 0.0
        for _ in range(4):
            junction = case_C + lag * volts * current_A
            volts = float(np.interp(junction, warmth, tables[current_A]))
        return volts + 0.0006 * current_A

    def pair(step: str, volts: float, amps: float) -> None:
        log.volts(step, "drop", volts + 1.5e-6, 1e-6)
        log.volts(step, "exposed_current", amps + 2e-4, 1e-4, "A")

    for _ in range(6):
        pair("zero/before", 0.0, 0.0)
        log.degrees("rest", "case", ambient + 0.2)
        log.degrees("rest", "ambient", ambient)
        log.now += 0.5
    reached = file.sweep.currents_A[: board.currents]
    warm = 0.0
    for way, amps in (*(("up", a) for a in reached), *(("down", a) for a in reversed(reached))):
        step = f"sweep/1/{way}/{amps!r}"
        log.now += 0.2
        warm += 0.01 * amps
        pair(step, drop(amps, ambient + warm), amps * 1.0005)
        log.degrees(step, "case", ambient + warm + 0.2)
        log.degrees(step, "ambient", ambient)
    for kind, text in board.events:
        log.event(kind, text, time_s=log.now)
    if board.soak_s and file.soak is not None:
        amps, begun = file.soak.current_A, log.now
        log.event("soak-begins", f"soak at {amps:g} A", time_s=begun)
        rise = 0.0
        for k in range(int(board.soak_s)):
            log.now = begun + k
            volts = drop(amps, ambient + rise)
            loss = (volts - 0.0006 * amps) * amps
            aim = board.resistance_K_per_W * loss
            rise = aim * (1 - 0.8 * np.exp(-k / 42.0) - 0.2 * np.exp(-k / 6.0))
            log.degrees("soak", "case", ambient + float(rise) + 0.2)
            log.degrees("soak", "ambient", ambient)
            if k % 5 == 0:
                pair("soak", volts, amps)
    for _ in range(6):
        log.now += 0.5
        pair("zero/after", 0.0, 0.0)
    if board.reversal is not None:
        log.now += 30.0
        log.event("step", "leads crossed", time_s=log.now)
        _reverse(log, board.reversal, board.trip, ambient, pair)
        log.event("step", "leads put back", time_s=log.now)
        for amps in board.reversal.currents:
            log.now += 1.0
            log.degrees(f"after/{amps!r}", "case", ambient + 0.2)
            for _ in range(4):
                before = drop(amps, ambient) - 0.0006 * amps
                pair(f"after/{amps!r}", board.reversal.after * before + 0.0006 * amps, amps)
    with (folder / "readings.csv").open("w", encoding="utf-8", newline="") as out:
        csv.writer(out, lineterminator="\n").writerows([COLUMNS, *log.rows])
    lines = "".join(json.dumps(line) + "\n" for line in log.lines)
    (folder / "events.jsonl").write_text(lines, encoding="utf-8")
    return read_record(folder)


def _reverse(
    log: _Log, trial: Reversal, trip: str, ambient: float,
    pair: Callable[[str, float, float], None],
) -> None:  # fmt: skip
    log.event("harness", REVERSED_HARNESS.sentence(), time_s=log.now)

    def look(step: str, volts: float) -> None:
        log.now += 0.5
        amps = volts / (trial.series_ohm + 2e5)
        pair(step, -volts, -amps - volts / trial.across_ohm)
        log.level(step, "exposed_voltage", -volts)
        log.level(step, "guarded_voltage", -2e5 * amps)
        log.degrees(step, "case", ambient + 0.2)

    for _ in range(8 if trial.zero else 0):
        look("zero/reverse", 0.0)
    look("polarity/reversed", 1.0)
    for volts in trial.rungs:
        log.event("step", f"reverse/{volts!r}", time_s=log.now)
        for _ in range(4):
            look(f"reverse/{volts!r}", volts)
    if trip:
        step = f"reverse/{trial.rungs[-1]!r}"
        log.event("trip", trip, time_s=log.now, step=step)
        log.event("stopped", f"{trip} at {log.now:.3f} s, in step {step}", time_s=log.now)
    for _ in range(trial.dwell):
        log.now += 0.5
        look("reverse/dwell", trial.rungs[-1])


def run(folder: Path, board: Board, serial: str = "TG-0007") -> tuple[Record, Evaluation]:
    """A record and its evaluation."""
    made = record(folder, board)
    return made, evaluate(made, serial)


def like(evaluation: Evaluation, serial: str, factor: float) -> Evaluation:
    """The same evaluation for another serial, every figure measured ``factor`` times as large."""
    rows = [
        replace(m, measured=None if m.measured is None else m.measured * factor)
        for m in evaluation.result.measurands
    ]
    return replace(evaluation, result=replace(evaluation.result, serial=serial, measurands=rows))


def test_a_typical_board_passes_and_a_worse_one_fails(tmp_path: Path) -> None:
    _, good = run(tmp_path / "good", Board())
    _, bad = run(tmp_path / "bad", Board(scale=1.7))
    assert good.result.verdict == "pass"
    assert bad.result.verdict == "fail"
    assert good.soak is not None
    assert good.soak.heating.usable
    assert abs(good.soak.resistance_K_per_W - 44.0) < 0.8
