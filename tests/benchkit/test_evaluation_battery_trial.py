"""A battery trial judged from written records: what stands, what does not, and why it is said."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from benchkit.evaluation.battery_trial_circuits import BACK, FLAT, OFF, ON, around_of
from benchkit.evaluation.battery_trial_judged import judge_battery_trial
from benchkit.evaluation.promised import Promised
from benchkit.reading import Reading
from benchkit.records.record import Record
from tests.benchkit.battery_records import (
    SENSED_A,
    TRIAL,
    Rows,
    answer,
    bench,
    judged,
    record_of,
    row,
    stage_of,
    told,
)
from tests.benchkit.nine_stages import made


def test_a_stage_without_the_table_has_no_such_part() -> None:
    stage = made("pmos-pass")
    record = Record(Path("nowhere"), bench(), stage.file, (), ())
    assert judge_battery_trial(record, Promised(stage, stage.typical(), None, None, ())) is None


# reversed


@pytest.mark.parametrize(("state", "guarded"), [(OFF, -2e-5), (ON, 12.003)])
def test_a_sensed_stage_that_blocks_stands_it(state: str, guarded: float) -> None:
    tables = "[limits]\nbattery_current_max_A = 1e-3\n"
    stage = stage_of("pmos-sensed", state, tables=tables)
    part = judged(stage, record_of(stage, state, {15.0: (-SENSED_A, guarded)}))
    assert answer(part) == "stands"
    assert told(part) == []
    current = row(part, "battery_current")
    # The zero is taken off, and the sign is that of a battery which gives.
    assert current.measured == pytest.approx(SENSED_A, abs=1e-6)
    assert current.verdict == "pass"
    assert current.predicted is not None
    assert current.predicted["low"] < SENSED_A < current.predicted["high"]
    assert current.U is not None
    # What moves the zero is all that is left: a quarter of 0.0035 % of 0.1 V across 10 milliohm.
    assert pytest.approx(0.25 * 3.5e-6 / 0.01, rel=0.15) == current.U
    [found] = part.scenarios
    assert (found.scenario, found.agrees) == (state, True)
    assert row(part, "battery_guarded").verdict is None


def test_a_gate_tied_to_ground_fails_as_predicted() -> None:
    stage = stage_of("pmos-pass", ON)
    limit_A = around_of(stage.file, bench()).supply_A
    record = record_of(
        stage, ON, {15.0: (-limit_A, 1.9)}, ("battery-conducts", "it conducts"), dwell=False
    )
    part = judged(stage, record)
    [(weight, text)] = told(part)
    assert weight == "fault"
    assert "with the battery reversed and the equipment on it conducts 0.054 A" in text
    assert "with the guarded port at 1.9 V, of 12 V, as predicted" in text
    assert "the gate is tied to the other lead, so the equipment's own supply keeps it on" in text
    assert [s.agrees for s in part.scenarios] == [True]
    assert answer(part) == "does not stand: it conducts"


def test_what_must_not_be_stood_is_only_told() -> None:
    stage = stage_of("pmos-pass", ON, 'must_stand = ["right-way"]')
    record = record_of(stage, ON, {15.0: (-0.0545, 1.9)}, ("battery-conducts", "it conducts"))
    assert [weight for weight, _ in told(judged(stage, record))] == ["note"]


def test_a_sensed_stage_that_conducts_is_not_excused_by_the_prediction() -> None:
    stage = stage_of("pmos-sensed", ON)
    record = record_of(stage, ON, {15.0: (-0.0545, 1.9)}, ("battery-conducts", "it conducts"))
    part = judged(stage, record)
    [(weight, text)] = told(part)
    assert weight == "fault"
    assert "By its datasheets it should not: suspect a short in the main part, or in what" in text
    assert "as predicted" not in text
    assert [s.agrees for s in part.scenarios] == [False]


def test_a_stage_that_conducts_for_a_moment_only_does_not_stand_it() -> None:
    stage = stage_of("pmos-sensed", OFF)
    record = record_of(stage, OFF, {15.0: (-SENSED_A, 0.0)})
    step, spike = next(
        (s, r) for s, r in record.readings
        if s.endswith("dwell") and r.point == "exposed_current"
    )  # fmt: skip
    moment = Reading(spike.time_s, spike.point, -0.05, "A", 0.0, spike.range, "ok")
    readings = tuple((s, moment if r is spike else r) for s, r in record.readings)
    part = judged(stage, Record(record.path, record.bench, record.stage, readings, record.events))
    assert step
    assert [weight for weight, _ in told(part)] == ["fault"]


@pytest.mark.parametrize(("state", "guarded"), [(OFF, -3.0), (ON, 8.0)])
def test_a_guarded_port_that_is_pulled_is_a_fault(state: str, guarded: float) -> None:
    stage = stage_of("pmos-sensed", state)
    part = judged(stage, record_of(stage, state, {15.0: (-3e-3, guarded)}))
    [(weight, text)] = told(part)
    assert weight == "fault"
    assert "next to nothing flows, but it leaves the guarded port at" in text


def test_a_leak_beyond_the_datasheets_is_a_doubt() -> None:
    stage = stage_of("pmos-sensed", OFF)
    part = judged(stage, record_of(stage, OFF, {15.0: (-2e-3, -0.1)}))
    [(weight, text)] = told(part)
    assert weight == "doubt"
    assert "more than the most that the datasheets' tolerances allow" in text
    assert answer(part) == "stands"


def test_a_stage_that_does_not_conduct_where_every_board_would_is_a_doubt() -> None:
    stage = stage_of("pmos-pass", ON)
    [(weight, text)] = told(judged(stage, record_of(stage, ON, {15.0: (0.0, 12.0)})))
    assert weight == "doubt"
    assert "Another part, or another circuit than the stage file says" in text


@pytest.mark.parametrize(
    ("text", "weight", "words"),
    [
        ("guarded_voltage is -14.9 V, below -0.9 V", "fault", "does not stand it: the guard ended"),
        ("the supply's own protection has tripped", "fault", "the stage conducts all that the"),
        ("the battery's stand-in's output went off by itself", "doubt", "the bench, not the stage"),
        ("battery_voltage against exposed_voltage is 3 V", "doubt", "the bench, not the stage"),
    ],
)
def test_a_trip_is_weighed_by_its_cause(text: str, weight: str, words: str) -> None:
    stage = stage_of("pmos-sensed", ON, tables="[limits]\nbattery_current_max_A = 1e-3\n")
    part = judged(stage, record_of(stage, ON, {}, ("trip", text)))
    [(found, said)] = told(part)
    assert found == weight
    assert words in said
    current = row(part, "battery_current")
    assert (current.verdict, current.measured) == ("undecided", None)
    # What the bench ended says nothing of the stage.
    assert [s.agrees for s in part.scenarios] == [False if weight == "fault" else None]


def test_a_state_that_was_not_done_or_cut_short_never_passes() -> None:
    stage = stage_of("pmos-sensed", ON, tables="[limits]\nbattery_current_max_A = 1e-3\n")
    part = judged(stage, record_of(stage, ON, {}))
    assert told(part) == [
        ("doubt", "the battery trial is not whole: reversed-battery-on, it was not done")
    ]
    assert row(part, "battery_current").verdict == "undecided"
    long = made("pmos-sensed", "", TRIAL.format(ON).replace("2.0", "60.0"))
    cut = judged(long, record_of(long, ON, {15.0: (-SENSED_A, 12.0)}))
    [(weight, text)] = told(cut)
    assert weight == "doubt"
    assert "it stayed for 3 s of 60 s" in text


# a clamp


@pytest.mark.parametrize("fused", [False, True])
def test_a_clamp_conducts_as_it_must_and_that_proves_no_fuse(fused: bool) -> None:
    tables = "[reverse]\n[fused_trial]\ncurrent_A = 50.0\n" if fused else ""
    stage = stage_of("fused-clamp", OFF, tables=tables)
    record = record_of(
        stage, OFF, {15.0: (-0.0985, -0.70)}, ("battery-conducts", "it conducts"), dwell=False
    )
    part = judged(stage, record)
    [(weight, text)] = told(part)
    assert weight == ("note" if fused else "doubt")
    assert "it conducts, as its datasheets say it must" in text
    assert ("the fused trial's to show" in text) == fused
    assert answer(part) == "conducts, as it must"
    assert [s.agrees for s in part.scenarios] == [True]


def test_a_clamp_that_does_not_hold_the_port_is_a_fault() -> None:
    stage = stage_of("fused-clamp", OFF)
    record = record_of(stage, OFF, {15.0: (-0.0985, -3.0)}, ("battery-conducts", "it conducts"))
    assert [weight for weight, _ in told(judged(stage, record))] == ["doubt", "fault"]


def test_a_clamp_that_is_open_is_a_fault() -> None:
    stage = stage_of("fused-clamp", OFF)
    part = judged(stage, record_of(stage, OFF, {15.0: (-0.015, -15.0)}))
    weight, text = told(part)[-1]
    assert weight == "fault"
    assert "the guarded port is taken to -15 V, further than" in text


# right way round


def test_back_feed_is_told_and_judged_by_its_limit() -> None:
    tables = "[limits]\nbattery_current_max_A = 5e-3\n"
    stage = stage_of("pmos-pass", BACK, tables=tables)
    part = judged(stage, record_of(stage, BACK, {15.0: (0.015, 15.0)}))
    [(weight, text)] = told(part)
    assert weight == "note"
    # 15 mA for 24 h.
    assert "15 mA drain from it into the 1000 ohm that stand for it, as predicted: 360 mAh" in text
    assert row(part, "battery_current").verdict == "fail"


def test_back_feed_outside_the_datasheets_tolerances_is_a_doubt() -> None:
    body = stage_of("pmos-sensed", BACK)
    leaking = judged(body, record_of(body, BACK, {15.0: (0.04, 15.0)}))
    assert [weight for weight, _ in told(leaking)] == ["doubt"]
    missing = judged(body, record_of(body, BACK, {15.0: (0.0, 0.0)}))
    [(weight, text)] = told(missing)
    assert weight == "doubt"
    assert "less than the least" in text


SLEEPS: Rows = {0.1: (0.0, 12.0), 0.5: (0.0, 12.0), 0.75: (-0.0305, 12.0)}


def test_a_sensed_charger_starts_where_its_transistor_sees_the_battery() -> None:
    stage = stage_of("pmos-sensed", FLAT)
    part = judged(stage, record_of(stage, FLAT, SLEEPS))
    [(weight, text)] = told(part)
    assert weight == "note"
    assert "a battery of 0.1 V is not charged, one of 0.75 V is" in text
    assert "as predicted" in text
    assert answer(part) == "charged from 0.75 V on"
    first, last = (r for r in part.rows if r.name == "battery_current")
    assert last.measured == pytest.approx(0.0305, abs=1e-6)
    assert first.verdict is last.verdict is None


@pytest.mark.parametrize(("stands", "weight"), [("", "doubt"), ('"flat-battery"', "fault")])
def test_a_flat_battery_that_is_charged_and_should_not_be(stands: str, weight: str) -> None:
    must = f"must_stand = [{stands}]" if stands else ""
    stage = stage_of("pmos-sensed", FLAT, must)
    part = judged(stage, record_of(stage, FLAT, {0.1: (-0.0305, 12.0)}))
    [(found, text)] = told(part)
    assert found == weight
    assert "a flat battery at 0.1 V is charged (30.5 mA)" in text
    assert "none would do so" in text
    assert [s.agrees for s in part.scenarios] == [False]


def test_a_charger_that_never_starts_is_named() -> None:
    stage = stage_of("pmos-sensed", FLAT)
    rows = dict.fromkeys((0.1, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0), (0.0, 12.0))
    [(weight, text)] = told(judged(stage, record_of(stage, FLAT, rows)))
    assert weight == "doubt"
    assert "every board would do so" in text


def test_what_is_not_covered_is_said() -> None:
    stage = stage_of("pmos-sensed", ON)
    part = judged(stage, record_of(stage, ON, {15.0: (-SENSED_A, 12.0)}))
    assert "in the scenarios reversed-battery-off, flat-battery, back-feed" in part.untested[0]
    assert "0.1 A at most flowed, which proves no fuse" in part.untested[1]
    assert all(math.isfinite(r.measured or 0.0) for r in part.rows)
