"""The reverse trial: planned, done on the simulated bench, and stopped in the middle."""

from __future__ import annotations

import json
import os
import signal
from pathlib import Path
from typing import cast

import pytest

import procedures.reverse as reverse_module
from benchkit.errors import NotConfirmedOff, OperatorStopped, Refused, Tripped
from benchkit.files import BenchFile, load
from benchkit.guard import Guard
from benchkit.harness import DRAWING, Harness, reversed_from
from benchkit.records.record import Record, read_json, read_record
from benchkit.records.run_folder import RunFolder
from procedures.commands import opened, verify_board
from procedures.inputs import read_board
from procedures.plan import plan_board
from procedures.rewired import left_crossed
from procedures.screen import Screen
from procedures.trial import Run
from procedures.verify import Done, run_board
from tests.benchkit.nine_stages import made, text
from tests.simulated_bench import GOOD, workshop
from tests.stand_in import Notes, StandInOperator, StandInWiring, World, guard_of

REVERSED = reversed_from(DRAWING, 1000.0)
LEFT = left_crossed(DRAWING)

REVERSE = "[reverse]\nsteps = 3\ndwell_s = 3.0\n"
BOARD = "TG-0050"
QUIET = Screen(quiet=True)


def shop(
    folder: Path, topology: str = "pmos-pass", *board: str, faults: tuple[str, ...] = ()
) -> Path:
    """A workshop with a stage ``mine.toml`` without a soak; ``board``: what is wrong with BOARD."""
    folder = workshop(folder, faults=faults, supply="supply-select", trial=True)
    (folder / "mine.toml").write_text(text(topology) + REVERSE, "utf-8")
    bench = folder / "bench.toml"
    bench.write_text(f"{bench.read_text('utf-8')}{BOARD} = {json.dumps(board)}\n", "utf-8")
    return folder


def tried(folder: Path) -> tuple[Done, Record]:
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    with opened(inputs, QUIET) as bench:
        done = run_board(bench, inputs.job, BOARD, folder / "run", QUIET)
    return done, read_record(done.folder)


def kinds(record: Record) -> list[object]:
    return [event["kind"] for event in record.events]


def most_V(record: Record) -> float:
    """The largest voltage that anything was programmed to with the leads crossed."""
    events = list(record.events)
    begin = next(i for i, e in enumerate(events) if "CROSSED" in str(e["text"]))
    on = [str(e["text"]).partition(": ")[2] for e in events[begin:] if e["kind"] == "on"]
    return max(float(told.partition(" V")[0]) for told in on)


# on the simulated bench


@pytest.mark.parametrize("topology", ["pmos-pass", "series-diode", "nmos-pass"])
def test_a_good_board_stands_it_and_drops_what_it_did(topology: str, tmp_path: Path) -> None:
    done, record = tried(shop(tmp_path / "w", topology))
    assert done.error is None
    assert [e["text"] for e in record.events if e["kind"] == "harness"] == [
        REVERSED.sentence(), DRAWING.sentence(),
    ]  # fmt: skip
    assert not {"trip", "stopped", "reverse-conducts", "left-reversed"} & set(kinds(record))
    proofs = [e["blocks"] for e in record.events if e["kind"] == "polarity"]
    assert proofs == [True, True, True]
    for volts in (5.0, 10.0, 15.0):
        step = f"reverse/{volts!r}"
        for point in ("exposed_voltage", "exposed_current", "guarded_voltage", "drop", "case"):
            assert len(record.at(step, point)) >= 4
        for reading in record.at(step, "exposed_voltage"):
            assert reading.value == pytest.approx(-volts, abs=0.02)
        mesh = [record.at(step, p)[-1].value for p in ("exposed_voltage", "guarded_voltage")]
        assert record.at(step, "drop")[-1].value == pytest.approx(mesh[0] - mesh[1], abs=0.01)
    dwell = record.at("reverse/dwell", "drop")
    assert dwell[-1].time_s - dwell[0].time_s == pytest.approx(2.0, abs=0.2)
    assert {r.value for r in record.at("reverse/dwell", "exposed_voltage") if r.value > -14.9} == (
        set()
    )
    # Zeros on the ranges of the trial, nothing on.
    for point in ("exposed_voltage", "exposed_current", "guarded_voltage"):
        zeros = record.at("zero/reverse", point)
        assert len(zeros) == 8
        assert {z.range for z in zeros} == {r.range for r in record.at("reverse/", point)}
        assert max(abs(z.value) for z in zeros) < 0.005
    for amps in (0.1, 2.0, 3.0):
        [after] = record.at(f"after/{amps!r}", "drop")
        before = record.at(f"sweep/1/up/{amps!r}", "drop")[0]
        assert after.range == before.range
        assert after.value == pytest.approx(before.value, rel=0.02)
    assert record.steps("after/") == ["after/0.1", "after/2.0", "after/3.0"]
    # Off between the rungs, and the caution once.
    told = [str(e["text"]) for e in record.events if e["kind"] in ("on", "off")]
    at = next(i for i, words in enumerate(told) if words.startswith("reverse 5 V"))
    words = ["reverse 5 V: 5 V", "confirmed off", "reverse 10 V: 10 V", "confirmed off",
             "reverse 15 V: 15 V", "confirmed off"]  # fmt: skip
    for said, expected in zip(told[at : at + 6], words, strict=True):
        assert said.startswith(expected)
    cautions = [str(e["text"]) for e in record.events if e["kind"] == "caution"]
    crossed = [words for words in cautions if "THE WRONG WAY ROUND" in words]
    assert len(crossed) == 1
    assert "eye protection" in crossed[0]


@pytest.mark.parametrize(
    ("fault", "bench_fault", "words"),
    [
        ("short", (), "guarded_voltage is -5"),
        ("leaky=1000", (), "guarded_voltage is -2"),
        ("wrong-way-round", (), "guarded_voltage is -4"),
        ("leaky=30", ("load-conducts-back",), "the supply"),
    ],
)
def test_a_board_that_does_not_block_goes_no_further(
    fault: str, bench_fault: tuple[str, ...], words: str, tmp_path: Path
) -> None:
    done, record = tried(shop(tmp_path / "w", "pmos-pass", fault, faults=bench_fault))
    assert isinstance(done.error, Tripped)
    assert words in str(done.error)
    assert "in step reverse/5.0" in str(done.error)
    assert most_V(record) == 5.0
    assert done.evaluation.result.verdict == "fail"
    # Off, and the leads put back and proved, for the next board.
    said = kinds(record)
    end = said.index("stopped")
    assert said[end : end + 4] == ["stopped", "off", "step", "harness"]
    assert record.events[end + 3]["text"] == DRAWING.sentence()
    assert said[-1] == "polarity"
    assert "left-reversed" not in said


def test_a_stage_that_conducts_a_volt_is_not_asked_for_more(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", "pmos-pass", "short", faults=("load-conducts-back",))
    done, record = tried(folder)
    assert done.error is None
    assert "no larger voltage was applied" in record.said("reverse-conducts")[0]
    assert not record.steps("reverse/")
    assert record.steps("after/")
    assert done.evaluation.result.verdict == "fail"


def test_leads_that_are_not_crossed_are_refused(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", faults=("crossing-stuck",))
    done, record = tried(folder)
    assert isinstance(done.error, Refused)
    assert "the leads are not crossed" in str(done.error)
    assert done.error.exit_code == 3
    assert most_V(record) == 1.0
    assert done.evaluation.result.verdict != "pass"


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM"])
def test_a_signal_in_the_dwell_ends_off_and_says_how_the_leads_are(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    folder, honest = shop(tmp_path / "w"), reverse_module._dwell

    def dwell(guard: Guard, *rest: object) -> None:
        os.kill(os.getpid(), getattr(signal, name))
        honest(guard, *rest)  # type: ignore[arg-type]

    monkeypatch.setattr(reverse_module, "_dwell", dwell)
    code = verify_board(
        folder / "mine.toml", folder / "bench.toml", BOARD, folder / "o", dry_run=False,
        as_json=True,
    )  # fmt: skip
    assert code == 3
    said = " ".join(capsys.readouterr().err.split())
    assert " ".join(LEFT.split()) in said
    assert f"stopped by {name}" in said
    record = read_record(folder / "o" / BOARD)
    assert kinds(record)[-3:] == ["stopped", "off", "left-reversed"]
    assert DRAWING.sentence() in record.said("left-reversed")[0]
    assert read_json(record.path / "manifest.json")["status"] == "stopped"
    assert read_json(record.path / "result.json")["verdict"] == "undecided"


def test_the_board_after_one_that_tripped_is_measured(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", "pmos-pass", "short")
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    with opened(inputs, QUIET) as bench:
        first = run_board(bench, inputs.job, BOARD, folder / "first", QUIET)
        second = run_board(bench, inputs.job, GOOD, folder / "second", QUIET)
    assert isinstance(first.error, Tripped)
    assert second.error is None
    assert read_record(second.folder).steps("after/")


def test_leads_that_a_run_left_crossed_are_put_back_before_the_next_board(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w")
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    with opened(inputs, QUIET) as bench:
        bench.guard.arrange(REVERSED)
        done = run_board(bench, inputs.job, GOOD, folder / "run", QUIET)
    assert done.error is None
    assert read_record(done.folder).said("harness")[0] == DRAWING.sentence()


# on a scripted bench, what no simulated one does


def tries(folder: Path, world: World, notes: Notes, guard: Guard | None = None) -> Guard:
    """The trial alone on the scripted bench."""
    bench = load(BenchFile, workshop(folder, trial=True) / "bench.toml")
    guard = guard or guard_of(world, notes)
    guard.begin(notes)
    guard.make_safe("at the start")
    does(guard, bench, [0.1, 0.5, 1.0, 2.0, 3.0])
    return guard


def does(guard: Guard, bench: BenchFile, carried_A: list[float]) -> None:
    """The planned trial; nothing of it goes to a folder."""
    stage = made("pmos-pass", tables=REVERSE)
    plan = plan_board(stage, bench)
    nowhere = cast("RunFolder", None)
    [trial] = plan.trials
    trial.do(Run(guard, stage, bench, plan.forward, nowhere, QUIET, carried_A=carried_A))


def test_a_case_that_the_soak_left_warm_is_waited_for(tmp_path: Path) -> None:
    class Cooling(World):
        def pass_time(self, seconds: float) -> None:
            super().pass_time(seconds)
            if not self.on:
                self.case_C = max(25.0, self.case_C - 0.5 * seconds)

    world, notes = Cooling(case_C=45.0), Notes()
    tries(tmp_path / "w", world, notes)
    crossed = next(i for i, (kind, _) in enumerate(notes.events) if kind == "harness")
    assert ("step", "cool") in notes.events[:crossed]
    case = [r.value for step, r in notes.readings if step == "cool" and r.point == "case"]
    assert case[0] > 40
    assert case[-1] == pytest.approx(26.0, abs=1.0)


def test_a_case_that_never_cools_is_not_waited_for_for_ever(tmp_path: Path) -> None:
    world = World(case_C=45.0)
    tries(tmp_path / "w", world, Notes())
    # Six of its time constants of 40 s, and the trial itself.
    assert 240 < world.time_s < 300


@pytest.mark.parametrize("declined", [REVERSED, DRAWING])
def test_a_person_who_declines_is_told_that_the_leads_may_be_crossed(
    declined: Harness, tmp_path: Path
) -> None:
    class Declining(StandInWiring):
        def arrange(self, harness: Harness) -> None:
            if harness == declined:
                raise OperatorStopped("the leads were not moved")
            super().arrange(harness)

    world, notes = World(), Notes()
    guard = guard_of(world, notes)
    guard._leads.wiring = Declining(world)
    with pytest.raises(OperatorStopped):
        tries(tmp_path / "w", world, notes, guard)
    assert notes.events[-1] == ("left-reversed", LEFT)
    assert not world.on


def test_a_caution_that_is_not_accepted_applies_nothing(tmp_path: Path) -> None:
    world, notes = World(), Notes()
    guard = guard_of(world, notes, operator=StandInOperator(answer=False))
    with pytest.raises(OperatorStopped, match="did not accept the caution"):
        tries(tmp_path / "w", world, notes, guard)
    assert not any(said.startswith("program 5") for said in world.said)
    assert notes.events[-1] == ("left-reversed", LEFT)


def test_nobody_touches_leads_that_may_be_live(tmp_path: Path) -> None:
    class Sticking(World):
        def pass_time(self, seconds: float) -> None:
            super().pass_time(seconds)
            self.stuck = self.volts > 9

    world, notes = Sticking(), Notes()
    with pytest.raises(NotConfirmedOff):
        tries(tmp_path / "w", world, notes)
    assert world.wired == [REVERSED]
    assert notes.events[-1] == ("left-reversed", LEFT)


def test_ports_that_hold_a_charge_are_not_told_as_crossed(tmp_path: Path) -> None:
    world, notes = World(), Notes()
    guard = guard_of(world, notes)
    guard.begin(notes)
    guard.make_safe("at the start")
    world.residual_V = 0.8
    bench = load(BenchFile, workshop(tmp_path / "w", trial=True) / "bench.toml")
    with pytest.raises(Refused, match="with everything off"):
        does(guard, bench, [0.1])
    assert world.wired == []
    assert "left-reversed" not in notes.kinds()
