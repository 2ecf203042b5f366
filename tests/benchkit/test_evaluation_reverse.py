"""The trial in reverse, judged from its record: what it finds, and what it does not pass over."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest

from benchkit.audit import audit
from benchkit.evaluation.evaluate import Evaluation, evaluate
from benchkit.records.record import read_record
from benchkit.records.result import Measurand
from benchkit.records.run_folder import seal, write_json
from tests.benchkit.test_reports_material import (
    BENCH,
    CHANNEL,
    JUNCTION,
    REVERSED,
    Board,
    Reversal,
    record,
    run,
)

GOOD = Board(stage=REVERSED, reversal=Reversal(series_ohm=1e9))
CONDUCTS = "at 1 V it conducts all that the supply gives; nothing larger was applied"
LIMITS = "the supply limits its current at 0.1 A, which the step does not expect"


def judged(tmp_path: Path, board: Board) -> Evaluation:
    return run(tmp_path / "run", board)[1]


def rows(evaluation: Evaluation, name: str) -> list[Measurand]:
    return [m for m in evaluation.result.measurands if m.name == name]


def figure(evaluation: Evaluation, name: str) -> tuple[float, float]:
    """Measured and U of the one row of a name."""
    (row,) = rows(evaluation, name)
    assert row.measured is not None
    assert row.U is not None
    return row.measured, row.U


def why(evaluation: Evaluation) -> str:
    return "; ".join(evaluation.result.why)


def test_a_board_that_blocks_passes(tmp_path: Path) -> None:
    good = judged(tmp_path, GOOD)
    assert good.result.verdict == "pass"
    leakage, U = figure(good, "reverse_leakage")
    assert abs(leakage - 15e-9) < U
    # 15 V through 1 gigohm into 200 kilohms.
    guarded, U = figure(good, "reverse_guarded")
    assert abs(guarded - 15.0 * 2e5 / (1e9 + 2e5)) < U < 0.5e-3
    for change in rows(good, "drop_change"):
        assert change.measured is not None
        assert change.U is not None
        assert abs(change.measured) < change.U
    assert [m.condition.split(",")[0] for m in rows(good, "drop_change")] == ["0.1 A", "3 A", "5 A"]
    (row,) = rows(good, "reverse_leakage")
    assert row.condition.startswith("15 V reversed, after 6 s, case at ")
    assert good.result.not_tested[0].startswith("reversed polarity beyond 15 V for 6 s")


def test_what_the_bench_cannot_see_is_said(tmp_path: Path) -> None:
    """A microvolt of noise across 10 milliohms is 100 uA: the sheet's 1 uA is out of its reach."""
    few = REVERSED.replace("leakage_max_A = 1e-3", "leakage_max_A = 10e-6")
    blind = judged(tmp_path, replace(GOOD, stage=few))
    (row,) = rows(blind, "reverse_leakage")
    assert row.remark.startswith("not seen: below ")
    assert "the limit is less than this bench can see" in row.remark
    assert row.verdict == "undecided"
    assert blind.result.verdict == "undecided"


def test_a_leak_is_measured_with_what_shunt_and_meter_allow(tmp_path: Path) -> None:
    leaky = Reversal(series_ohm=1e9, across_ohm=15.0 / 5e-3)
    made = judged(tmp_path, replace(GOOD, reversal=leaky))
    value, U = figure(made, "reverse_leakage")
    assert value == pytest.approx(5e-3, abs=U)
    tolerant = BENCH.replace("shunt_tolerance_percent = 0.1", "shunt_tolerance_percent = 20.0")
    vague = judged(tmp_path / "vague", replace(GOOD, reversal=leaky, bench=tolerant))
    # A fifth of it is the shunt's limit of error, 95 % of which is the U of that alone.
    assert 0.95e-3 < figure(vague, "reverse_leakage")[1] < 1.05e-3


def test_a_leak_within_its_limit_but_far_outside_the_band_is_a_fault(tmp_path: Path) -> None:
    stage = REVERSED.replace("leakage_max_A = 1e-3", "leakage_max_A = 20e-3")
    made = judged(tmp_path, replace(GOOD, stage=stage, reversal=Reversal(across_ohm=3000.0)))
    assert rows(made, "reverse_leakage")[0].verdict == "pass"
    assert made.result.verdict == "fail"
    assert "the stage does not block in reverse: at 15 V in reverse 5" in why(made)


def test_a_small_leak_outside_the_band_is_a_doubt(tmp_path: Path) -> None:
    made = judged(tmp_path, replace(GOOD, reversal=Reversal(across_ohm=15.0 / 0.6e-3)))
    assert rows(made, "reverse_leakage")[0].verdict == "pass"
    assert made.result.verdict == "undecided"
    assert "more than the most that the datasheets' tolerances allow" in why(made)


def test_a_leak_into_the_guarded_port_is_seen_there(tmp_path: Path) -> None:
    """50 kilohms across the stage: microamperes, but four fifths of the voltage."""
    made = judged(tmp_path, replace(GOOD, reversal=Reversal(series_ohm=5e4)))
    assert rows(made, "reverse_leakage")[0].verdict == "pass"
    assert rows(made, "reverse_guarded")[0].verdict == "fail"
    assert figure(made, "reverse_guarded")[0] == pytest.approx(12.0, abs=2e-3)
    assert "the guarded port is driven 12 V below zero, further than" in why(made)


def test_a_stage_that_conducts_at_one_volt_fails(tmp_path: Path) -> None:
    board = replace(
        GOOD, reversal=Reversal(rungs=(), dwell=0, currents=()),
        events=(("reverse-conducts", CONDUCTS),),
    )  # fmt: skip
    made = judged(tmp_path, board)
    assert made.result.verdict == "fail"
    assert why(made).startswith(f"the stage does not block in reverse: {CONDUCTS}")
    assert rows(made, "reverse_leakage")[0].verdict == "undecided"


@pytest.mark.parametrize(
    ("text", "verdict"),
    [
        (LIMITS, "fail"),
        ("guarded_voltage is -6.1 V, below -0.6 V", "fail"),
        ("exposed_current gives no usable reading (overload)", "fail"),
        ("case gives no usable reading (overload)", "undecided"),
        ("the supply's output went off by itself", "undecided"),
    ],
)
def test_a_trip_at_a_rung(tmp_path: Path, text: str, verdict: str) -> None:
    short = Reversal(rungs=(5.0, 10.0), dwell=0, currents=())
    made = judged(tmp_path, replace(GOOD, reversal=short, trip=text))
    assert made.result.verdict == verdict
    assert ("does not block in reverse" in why(made)) == (verdict == "fail")
    assert rows(made, "reverse_leakage")[0].remark.endswith("it reached 10 V of 15 V")
    assert made.trial is not None
    assert [rung.target_V for rung in made.trial.rungs] == [5.0, 10.0]


def test_a_trip_elsewhere_is_not_the_trials(tmp_path: Path) -> None:
    board = replace(GOOD, events=(("trip", LIMITS), ("stopped", LIMITS)))
    assert "block in reverse" not in why(judged(tmp_path, board))


@pytest.mark.parametrize("share", [0.97, 1.03])
def test_a_part_that_the_trial_changed_fails(tmp_path: Path, share: float) -> None:
    made = judged(tmp_path, replace(GOOD, reversal=Reversal(after=share)))
    assert made.result.verdict == "fail"
    assert why(made).startswith("the trial changed the part: at ")
    before = 0.05386
    change = next(m for m in rows(made, "drop_change") if m.condition.startswith("3 A"))
    assert change.measured == pytest.approx((share - 1) * before, abs=change.U)


def test_errors_common_to_before_and_after_leave_the_change(tmp_path: Path) -> None:
    """Of a shunt known to 5 % only the change is known as well as of one known to 0.1 %."""
    vague = BENCH.replace("shunt_tolerance_percent = 0.1", "shunt_tolerance_percent = 5.0")
    made = judged(tmp_path / "vague", replace(GOOD, bench=vague))
    exact = judged(tmp_path / "exact", GOOD)
    for one, other in zip(rows(made, "drop_change"), rows(exact, "drop_change"), strict=True):
        assert pytest.approx(other.U, rel=0.02) == one.U
    assert made.drops[-1].budget.expanded().U > 2 * exact.drops[-1].budget.expanded().U


def test_a_part_that_was_warmer_afterwards_is_not_one_that_changed(tmp_path: Path) -> None:
    """The typical channel drops 0.4 % more a kelvin: 4 K and 1.6 % more are no change."""
    board = record(tmp_path / "run", GOOD)
    lines = (board.path / "readings.csv").read_text("utf-8").splitlines()
    warm = []
    for line in lines:
        cells = line.split(",")
        if cells[1].startswith("after/") and cells[2] == "case":
            cells[3] = repr(float(cells[3]) + 4.0)
        elif cells[1].startswith("after/") and cells[2] == "drop":
            amps = float(cells[1].partition("/")[2])
            pure = float(cells[3]) - 1.5e-6 - 0.0006 * amps
            cells[3] = repr(float(cells[3]) + 0.0047 * 4.0 * pure)
        warm.append(",".join(cells))
    (board.path / "readings.csv").write_text("\n".join(warm) + "\n", "utf-8")
    made = evaluate(read_record(board.path), "TG-0007")
    assert made.result.verdict == "pass"
    for change in rows(made, "drop_change"):
        assert change.measured is not None
        assert change.U is not None
        assert abs(change.measured) < change.U


def test_without_a_zero_the_declared_offset_stays(tmp_path: Path) -> None:
    made = judged(tmp_path / "without", replace(GOOD, reversal=Reversal(zero=False)))
    (row,) = rows(made, "reverse_leakage")
    assert any(line.name == "offset of exposed_current, not zeroed" for line in row.budget)
    assert any("no zero of exposed_current" in text for text in made.result.findings)
    with_zero = judged(tmp_path / "with", GOOD)
    assert figure(made, "reverse_leakage")[1] > 1.5 * figure(with_zero, "reverse_leakage")[1]
    # The record's meter has an offset of 200 uA, the declared 350 uA hold it.
    assert abs(figure(made, "reverse_leakage")[0]) < figure(made, "reverse_leakage")[1]


@pytest.mark.parametrize(
    ("reversal", "reason"),
    [
        (None, "it did not take place"),
        (Reversal(rungs=(5.0,), dwell=0), "it reached 5 V of 15 V"),
        (Reversal(dwell=1), "15 V stayed for 0 s of 6 s"),
        (Reversal(currents=(0.1, 3.0)), "the drop was not measured again after it, at 5 A"),
    ],
)
def test_a_trial_that_is_not_whole_is_never_passed(
    tmp_path: Path, reversal: Reversal | None, reason: str
) -> None:
    unasked = REVERSED.replace("leakage_max_A = 1e-3\n", "").replace(
        "guarded_reverse_max_V = 0.5\n", ""
    )
    made = judged(tmp_path, replace(GOOD, stage=unasked, reversal=reversal))
    assert made.result.verdict == "undecided"
    assert made.result.why[0] == f"the trial in reverse is not whole: {reason}"
    assert any(reason in text for text in made.result.not_tested)


def test_leads_left_crossed_are_told(tmp_path: Path) -> None:
    text = "the leads are still crossed"
    made = judged(tmp_path, replace(GOOD, events=(("left-reversed", text),)))
    assert text in made.result.findings


def test_a_schottky_drives_an_open_port_and_is_sound(tmp_path: Path) -> None:
    """Tens of microamperes into 200 kilohms are volts, which no sound load would see."""
    stage = JUNCTION.replace(
        "[limits]\n", "[reverse]\nsteps = 3\ndwell_s = 6.0\n[limits]\n"
    ).replace("case_max_C = 110.0", "case_max_C = 150.0")
    trial = Reversal(series_ohm=5e5, currents=(0.05, 3.0, 5.0))
    made = judged(tmp_path, Board(stage=stage, reversal=trial))
    (row,) = rows(made, "reverse_guarded")
    assert row.predicted is not None
    assert row.predicted["low"] < 4.3 < row.predicted["high"]
    assert not any("guarded port is driven" in text for text in made.result.why)


SCHOTTKY = JUNCTION.replace(
    "[limits]\n", "[reverse]\nsteps = 3\ndwell_s = 6.0\n[limits]\n"
).replace("case_max_C = 110.0", "case_max_C = 150.0")
BLEEDER = BENCH.replace("power_max_W", "bleeder_ohm = 1000.0\npower_max_W")
BLIND = "the trial cannot tell a part that leaks from one that blocks: declare bench.bleeder_ohm"


def test_an_open_port_cannot_tell_a_leaky_schottky_from_a_sound_one(tmp_path: Path) -> None:
    """500 uA, where 75 uA take 200 kilohms all the way down."""
    trial = Reversal(series_ohm=5e5, currents=(0.05, 3.0, 5.0))
    without = judged(tmp_path / "without", Board(stage=SCHOTTKY, reversal=trial))
    assert BLIND in without.result.why
    assert without.result.verdict == "undecided"
    # A sound MOSFET's microampere does not come near.
    assert BLIND not in judged(tmp_path / "channel", GOOD).result.findings


@pytest.mark.parametrize(("guarded_V", "sound"), [(0.012, True), (15.0 * 1000 / 1100, False)])
def test_with_a_resistor_there_it_can(guarded_V: float, sound: bool, tmp_path: Path) -> None:
    """12 uA into 1 kohm, and 100 ohm across the part."""
    trial = Reversal(series_ohm=2e5 * (15.0 / guarded_V - 1), currents=(0.05, 3.0, 5.0))
    made = judged(tmp_path, Board(stage=SCHOTTKY, bench=BLEEDER, reversal=trial))
    assert BLIND not in made.result.findings
    assert ("the guarded port is driven 13.6 V below zero" in why(made)) is not sound
    assert (made.result.verdict == "pass") is sound
    (row,) = rows(made, "reverse_guarded")
    assert row.predicted is not None
    # No more than 500 uA (at 40 V) into 1 kohm within 5 %, at 15 V less.
    assert 0 < row.predicted["low"] < 0.012 < row.predicted["high"] < 0.525


@pytest.mark.parametrize(
    ("step", "point", "value", "verdict", "words"),
    [
        ("reverse/dwell", "guarded_voltage", -15.0, "undecided",
         "at 15 V in reverse, at its worst, the guarded port is driven 15 V below zero"),
        ("reverse/dwell", "exposed_current", -0.09, "fail",
         "the stage does not block in reverse: at 15 V in reverse, at its worst, 90"),
        ("reverse/10.0", "exposed_current", -0.09, "fail",
         "the stage does not block in reverse: at 10 V in reverse, at its worst, 90"),
        ("reverse/5.0", "guarded_voltage", -4.0, "undecided",
         "at 5 V in reverse, at its worst, the guarded port is driven 4 V below zero"),
    ],
)  # fmt: skip
def test_a_part_that_gives_way_for_a_moment_is_found(
    step: str, point: str, value: float, verdict: str, words: str, tmp_path: Path
) -> None:
    """The first reading of a step: of a dwell not one that its end is judged by."""
    board = record(tmp_path / "run", GOOD)
    lines = (board.path / "readings.csv").read_text("utf-8").splitlines()
    number = next(i for i, line in enumerate(lines) if f",{step},{point}," in line)
    cells = lines[number].split(",")
    cells[3] = repr(value)
    lines[number] = ",".join(cells)
    (board.path / "readings.csv").write_text("\n".join(lines) + "\n", "utf-8")
    made = evaluate(read_record(board.path), "TG-0007")
    assert words in why(made)
    assert made.result.verdict == verdict
    # The measurand is that of the end of the dwell.
    assert rows(made, "reverse_guarded")[0].verdict == "pass"
    assert rows(made, "reverse_leakage")[0].verdict == "pass"


def test_noise_alone_is_no_moment(tmp_path: Path) -> None:
    """The largest of many readings is far out, and no fault."""
    for seed in range(2, 6):
        long = replace(GOOD, seed=seed, reversal=Reversal(dwell=120))
        assert judged(tmp_path / str(seed), long).result.verdict == "pass"


def test_a_stage_file_without_the_table_is_judged_as_before(tmp_path: Path) -> None:
    plain = judged(tmp_path / "plain", Board())
    assert plain.trial is None
    assert plain.result.not_tested[0] == (
        "reversed polarity: no voltage was applied the wrong way round"
    )
    names = [m.name for m in plain.result.measurands]
    tried_names = [m.name for m in judged(tmp_path / "tried", GOOD).result.measurands]
    assert tried_names == [*names, "reverse_leakage", "reverse_guarded", *["drop_change"] * 3]
    assert "reverse" not in CHANNEL


def test_audit_works_it_out_again(tmp_path: Path) -> None:
    made, evaluation = run(tmp_path / "run", GOOD)
    write_json(made.path / "result.json", evaluation.result.document())
    seal(made.path, {"serial": "TG-0007"})
    assert audit(made.path) == []
    text = (made.path / "readings.csv").read_text("utf-8")
    *_, target = (line for line in text.splitlines() if ",reverse/dwell,guarded_voltage," in line)
    (made.path / "readings.csv").write_text(text.replace(f"{target}\n", ""), "utf-8")
    told = audit(made.path)
    assert "readings.csv was changed after the run" in told
    assert any(line.startswith("result.measurands") for line in told)
    assert json.loads((made.path / "result.json").read_text("utf-8"))["verdict"] == "pass"
