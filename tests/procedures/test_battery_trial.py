"""The battery trial on the simulated bench: what stands, what fails, what ends it."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import pytest

from benchkit.errors import BenchkitError, Stopped, Tripped
from benchkit.evaluation.battery_trial_judged import BatteryFound, judge_battery_trial
from benchkit.evaluation.part import Part
from benchkit.evaluation.promised import Promised
from benchkit.records.record import Record, read_record
from benchkit.records.run_folder import RunFolder
from procedures.battery_trial import BatteryTrialRun
from procedures.commands import opened
from procedures.inputs import read_board
from procedures.screen import Screen
from procedures.trial import Run
from procedures.verify import run_board, write_report
from tests.benchkit.nine_stages import text
from tests.simulated_bench import workshop

BOARD, QUIET = "TG-0050", Screen(quiet=True)
OFF, ON, FLAT, BACK = (
    "reversed-battery-off", "reversed-battery-on", "flat-battery", "back-feed",
)  # fmt: skip


def shop(
    folder: Path, topology: str, *board: str, states: tuple[str, ...] = (OFF, ON, FLAT, BACK),
    guards: str = "supply", dwell_s: float = 0.0,
) -> Path:  # fmt: skip
    """A workshop with a stage ``mine.toml``; ``board``: what is wrong with BOARD."""
    folder = workshop(folder, supply="supply-select")
    trial = f"[battery_trial]\nscenarios = {json.dumps(states)}\ndwell_s = {dwell_s}\n"
    must = f"must_stand = {json.dumps([name for name in states if name in (OFF, ON)])}\n"
    stage = text(topology, f'guards = "{guards}"\n{must}', trial)
    (folder / "mine.toml").write_text(stage, "utf-8")
    bench = folder / "bench.toml"
    bench.write_text(f"{bench.read_text('utf-8')}{BOARD} = {json.dumps(board)}\n", "utf-8")
    return folder


@dataclass
class Tried:
    part: Part
    record: Record
    error: BenchkitError | None
    confirmed_off: bool
    home: str

    @property
    def answers(self) -> dict[str, str]:
        assert isinstance(self.part.detail, BatteryFound)
        return {one.state.name: one.answer for one in self.part.detail.states}

    @property
    def told(self) -> list[tuple[str, str]]:
        return [(remark.weight, remark.text) for remark in self.part.remarks]

    def harnesses(self) -> list[str]:
        return self.record.said("harness")


def tried(folder: Path) -> Tried:
    """The trial alone, on a board that was just put in."""
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    job, error = inputs.job, None
    [trial] = job.plan.trials
    assert isinstance(trial, BatteryTrialRun)
    with opened(inputs, QUIET) as bench, RunFolder(folder / "run", job.inputs) as journal:
        guard, forward = bench.guard, job.plan.forward
        guard.begin(journal)
        bench.fixture.place(BOARD, job.stage_path, forward.home)
        guard.placed(forward.home)
        guard.permit()
        try:
            trial.do(Run(guard, job.stage, bench.file, forward, journal, QUIET, rest_K=2.0))
        except Stopped as stopped:
            error = stopped
        off = guard.confirmed_off
    record = read_record(folder / "run")
    part = judge_battery_trial(record, Promised(job.stage, job.stage.typical(), None, None, ()))
    assert part is not None
    return Tried(part, record, error, off, forward.home.sentence())


def test_a_sensed_charger_stands_a_reversed_battery_and_waits_for_a_sound_one(
    tmp_path: Path,
) -> None:
    done = tried(shop(tmp_path / "w", "pmos-sensed"))
    assert done.error is None
    assert done.answers == {
        OFF: "stands", ON: "stands", FLAT: "charged from 0.75 V on", BACK: "drains",
    }  # fmt: skip
    assert {weight for weight, _ in done.told} == {"note"}
    assert all(found.agrees for found in done.part.scenarios)
    # As few leads as can be, the last of them back home and proved.
    assert len(done.harnesses()) == 5
    assert done.harnesses()[-1] == done.home
    assert done.record.events[-1]["kind"] == "polarity"
    assert "left-reversed" not in [event["kind"] for event in done.record.events]
    # Off between the rungs of a battery that recovers, and no rung beyond the one that charges.
    rungs = done.record.steps(f"battery/{FLAT}/")
    assert [s.rpartition("/")[2] for s in rungs if "alone" not in s] == ["0.1", "0.5", "0.75"]
    on = [str(e["text"]).partition(":")[0] for e in done.record.events if e["kind"] == "on"]
    assert [name for name in on if name.startswith(FLAT)] == [
        f"{FLAT}, {volts} V" for volts in ("0.1", "0.5", "0.75")
    ]


def test_a_gate_tied_to_ground_does_not_guard_a_charger(tmp_path: Path) -> None:
    done = tried(shop(tmp_path / "w", "pmos-pass", states=(OFF, ON)))
    assert done.error is None
    assert done.answers[OFF] == "stands"
    [(weight, said)] = done.told
    assert weight == "fault"
    assert "the equipment's own supply keeps it on" in said
    assert "as predicted" in said
    # Seen to conduct, it was not kept on, and its readings are what the equipment's supply gives.
    assert not done.record.at(f"battery/{ON}/dwell", "exposed_current")
    [current] = done.record.at(f"battery/{ON}/15.0", "exposed_current")[-1:]
    assert current.value == pytest.approx(-0.8 * (0.1 - 15 / 470), abs=0.004)


def test_the_equipment_is_on_before_the_battery_comes(tmp_path: Path) -> None:
    done = tried(shop(tmp_path / "w", "nmos-sensed", states=(ON,), dwell_s=3.0))
    assert done.answers == {ON: "stands"}
    assert done.told == []
    [connected] = [e for e in done.record.events if e["kind"] == "connected"]
    assert str(connected["text"]).startswith("the battery at 15 V")
    alone = [r for s, r in done.record.readings if s == f"battery/{ON}/alone"]
    assert {r.point for r in alone} >= {"supply_voltage"}
    assert "battery_voltage" not in {r.point for r in alone}
    guarded = done.record.at(f"battery/{ON}/dwell", "guarded_voltage")
    assert guarded[-1].time_s - guarded[0].time_s > 1.5
    assert all(r.value == pytest.approx(12.0, abs=0.02) for r in guarded)


def test_a_shorted_sensing_transistor_is_found(tmp_path: Path) -> None:
    done = tried(shop(tmp_path / "w", "pmos-sensed", "sense-short", states=(ON,)))
    assert done.error is None
    [(weight, said)] = done.told
    assert weight == "fault"
    assert "By its datasheets it should not" in said
    assert [found.agrees for found in done.part.scenarios] == [False]


def test_a_shorted_switch_trips_and_ends_off_with_the_leads_at_home(tmp_path: Path) -> None:
    done = tried(shop(tmp_path / "w", "pmos-sensed", "short", states=(OFF, ON)))
    assert isinstance(done.error, Tripped)
    assert "guarded_voltage is -1" in str(done.error)
    assert done.confirmed_off
    weights = [weight for weight, _ in done.told]
    assert weights == ["fault", "doubt"]
    assert "the guard ended it, guarded_voltage is -1" in done.told[0][1]
    assert "reversed-battery-on, it was not done" in done.told[1][1]
    assert done.harnesses()[-1] == done.home


def test_a_clamp_takes_the_stand_ins_limit_and_says_that_it_proves_no_fuse(
    tmp_path: Path,
) -> None:
    done = tried(shop(tmp_path / "w", "fused-clamp", states=(OFF,)))
    assert done.error is None
    assert done.answers == {OFF: "conducts, as it must"}
    [(weight, said)] = done.told
    assert weight == "doubt"
    assert "what a clamp and its fuse do at full current is not proved here" in said


def test_a_run_with_it_is_judged_and_reported(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", "pmos-pass", guards="load", states=(OFF,))
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    with opened(inputs, QUIET) as bench:
        done = run_board(bench, inputs.job, BOARD, folder / "run", QUIET)
    assert done.error is None
    rows = [m for m in done.evaluation.result.measurands if m.name.startswith("battery_")]
    assert [m.name for m in rows] == ["battery_current", "battery_guarded"]
    found = [s for s in done.evaluation.result.scenarios if s["scenario"] == OFF]
    assert [s["agrees"] for s in found] == [True]
    page = write_report(done.folder, done.evaluation).read_text("utf-8")
    assert "With a battery at the exposed port" in page
    assert "reversed, equipment off" in page
    assert "a small limit proves no fuse" in page
