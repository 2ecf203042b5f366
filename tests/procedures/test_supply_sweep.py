"""The supply sweep: planned, done on the simulated bench, and ended where a stage goes off."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest

from benchkit.errors import InputError, Tripped
from benchkit.files import BenchFile, StageFile, load
from benchkit.files.loading import parse
from benchkit.records.record import Record, read_record
from benchkit.records.result import Measurand
from procedures.commands import opened
from procedures.inputs import read_board
from procedures.plan import Plan, plan_board
from procedures.screen import Screen
from procedures.supply_sweep import SupplySweepTrial
from procedures.verify import Done, run_board, write_report
from tests.benchkit.nine_stages import made, text
from tests.simulated_bench import workshop

BOARD = "TG-0050"
QUIET = Screen(quiet=True)
VOLTS = [2.0, 2.4, 2.8, 3.6, 6.0, 12.0, 15.0]
SWEEP = f"[supply_sweep]\nvoltages_V = {VOLTS}\n"
LIMITS = "[limits]\ndrop = [{ current_A = 2.0, max_V = 0.07 }]\n"
GATE = '[points.gate_voltage]\ninstrument = "meter"\nroute = "105"\n\n[points.case]'


def shop(
    folder: Path,
    topology: str,
    *board: str,
    tables: str = SWEEP + LIMITS,
    stage: str = "",
    gate: bool = True,
    faults: tuple[str, ...] = (),
) -> Path:
    """A workshop with a stage ``mine.toml``; ``board``: what is wrong with BOARD."""
    folder = workshop(folder, faults=faults, trial=True)
    (folder / "mine.toml").write_text(text(topology, stage, tables), "utf-8")
    bench = folder / "bench.toml"
    told = bench.read_text("utf-8")
    before, found, after = told.partition("[points.gate_voltage]")
    if found:
        told = before + after[after.index("[points.") :]
    if gate:
        told = told.replace("[points.case]", GATE, 1)
    bench.write_text(f"{told}{BOARD} = {json.dumps(board)}\n", "utf-8")
    return folder


def tried(folder: Path, change: tuple[int, float] | None = None) -> tuple[Done, Record]:
    """change: (number of a rung, its limit of loss in watts instead)."""
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    job = inputs.job
    if change is not None:
        [trial] = job.plan.trials
        assert isinstance(trial, SupplySweepTrial)
        rungs = list(trial.plan.rungs)
        rung = rungs[change[0]]
        tight = replace(rung.envelope, loss_max_W=change[1])
        rungs[change[0]] = replace(rung, envelope=tight)
        fewer = replace(trial, plan=replace(trial.plan, rungs=tuple(rungs)))
        job = replace(job, plan=replace(job.plan, trials=(fewer,)))
    with opened(inputs, QUIET) as bench:
        done = run_board(bench, job, BOARD, folder / "run", QUIET)
    return done, read_record(done.folder)


def row(done: Done, name: str) -> Measurand:
    [found] = [m for m in done.evaluation.result.measurands if m.name == name]
    return found


def why(done: Done) -> str:
    return "; ".join(done.evaluation.result.why)


def planned(topology: str, tables: str = SWEEP, stage: str = "", *, gate: bool = False) -> Plan:
    bench = load(BenchFile, Path(__file__).parents[2] / "benchkit/files/starters/bench.toml")
    points = {k: v for k, v in bench.points.items() if gate or k != "gate_voltage"}
    return plan_board(made(topology, stage, tables), bench.model_copy(update={"points": points}))


def trial_of(plan: Plan) -> SupplySweepTrial:
    [trial] = plan.trials
    assert isinstance(trial, SupplySweepTrial)
    return trial


# on the simulated bench


@pytest.mark.parametrize("topology", ["pmos-pass", "nmos-pass"])
def test_a_good_board_is_on_well_below_its_supply_range(topology: str, tmp_path: Path) -> None:
    done, record = tried(shop(tmp_path / "w", topology))
    assert done.error is None
    assert done.evaluation.result.verdict == "pass", why(done)
    assert record.steps("supply/") == [f"supply/{v!r}" for v in reversed(VOLTS)]
    assert not record.said("supply-sweep-ends")
    # Off between the steps.
    told = [str(e["text"]) for e in record.events if e["kind"] in ("on", "off")]
    at = next(i for i, words in enumerate(told) if words.startswith("supply sweep 15 V"))
    assert [words.partition(":")[0] for words in told[at : at + 4]] == [
        "supply sweep 15 V", "confirmed off", "supply sweep 12 V", "confirmed off",
    ]  # fmt: skip
    assert len([e for e in record.events if e["kind"] == "caution"]) == 2
    # The drop at the nominal voltage is that of the forward sweep, by other readings.
    [before] = record.at("sweep/1/up/2.0", "drop")
    for reading in record.at("supply/12.0", "drop"):
        assert reading.value == pytest.approx(before.value, rel=0.01)
    # Gate and source are apart by the whole supply less the drop: nothing flows into a gate.
    supply = record.at("supply/12.0", "exposed_voltage")[0].value
    for reading in record.at("supply/12.0", "gate_voltage"):
        assert abs(reading.value) == pytest.approx(supply - before.value, abs=0.02)
    on = row(done, "on_from")
    assert on.predicted is not None
    assert on.measured is not None
    assert 2.0 < on.predicted["low"] < on.measured < on.predicted["high"] < 4.5
    margin = row(done, "gate_margin")
    assert margin.measured == pytest.approx(20.0 - 14.9, abs=0.1)
    assert margin.en is not None
    assert margin.en < 1
    assert "Against supply voltage" in write_report(done.folder, done.evaluation).read_text("utf-8")


def test_a_finer_sweep_lies_within_the_uncertainty_of_a_coarse_one(tmp_path: Path) -> None:
    found = []
    for name, volts in (("coarse", [2.0, 3.0, 5.0, 9.0]), ("fine", [2.4, 2.44, 2.48, 2.52, 9.0])):
        tables = f"[supply_sweep]\nvoltages_V = {volts}\n{LIMITS}"
        done, _ = tried(shop(tmp_path / name, "pmos-pass", tables=tables, gate=False))
        on = row(done, "on_from")
        assert on.measured is not None
        assert on.U is not None
        found.append((on.measured, on.U))
        assert not [m for m in done.evaluation.result.measurands if m.name.startswith("gate")]
    (coarse, wide), (fine, narrow) = found
    assert abs(coarse - fine) < wide
    assert narrow < 0.03
    assert 0.3 < wide < 0.6


def test_a_gate_that_is_open_is_found(tmp_path: Path) -> None:
    done, record = tried(shop(tmp_path / "w", "pmos-pass", "gate-open"))
    assert done.error is None
    assert len(record.steps("supply/")) == len(VOLTS)
    assert done.evaluation.result.verdict == "fail"
    assert "at 15 V supply the stage is not on: at 2 A it drops 7" in why(done)
    assert "it is not driven" in why(done)


def test_a_threshold_too_high_passes_at_nominal_voltage_and_is_found_here(tmp_path: Path) -> None:
    tables = SWEEP + LIMITS + "on_from_max_V = 5.0\n"
    folder = shop(tmp_path / "w", "pmos-pass", "wrong-part=4", tables=tables)
    done, _ = tried(folder)
    assert [m.verdict for m in done.evaluation.result.measurands if m.name == "drop"].count(
        "pass"
    ) == 1
    assert row(done, "on_from").verdict == "fail"
    assert "suspect another part with a higher threshold" in why(done)


def test_without_a_limit_a_stage_must_be_on_over_its_whole_supply_range(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", "pmos-pass", "wrong-part=5", stage="", tables=SWEEP + LIMITS)
    low = (folder / "mine.toml").read_text("utf-8").replace("min_V = 9.0", "min_V = 5.0", 1)
    (folder / "mine.toml").write_text(low, "utf-8")
    done, _ = tried(folder)
    assert done.evaluation.result.verdict == "undecided"
    assert "it is not on over its whole supply range, which begins at 5 V" in why(done)


def test_a_load_without_its_current_ends_the_sweep_and_nothing_trips(tmp_path: Path) -> None:
    """Half an ohm takes a volt of two: the load has not its 0.8 V, nor the board its current."""
    done, record = tried(shop(tmp_path / "w", "pmos-pass", "dry-joint=0.7", "gate-open"))
    assert done.error is None
    [ended] = record.said("supply-sweep-ends")
    assert ended.startswith("it ended at 2 V: the stage carried ")
    assert ended in why(done) or f"supply sweep: {ended}" in done.evaluation.result.findings


def test_a_stage_that_burns_too_much_ends_the_sweep_and_nothing_trips(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", "pmos-pass", "wrong-part=0.6")
    done, record = tried(folder, change=(VOLTS[::-1].index(2.4), 0.5))
    assert done.error is None
    assert "trip" not in {e["kind"] for e in record.events}
    assert record.steps("supply/")[-1] == "supply/2.4"
    [ended] = record.said("supply-sweep-ends")
    assert ended.startswith("it ended at 2.4 V: the stage burnt 1.")
    # The answer is known all the same.
    on = row(done, "on_from").measured
    assert on is not None
    assert 2.4 < on < 3.6
    assert done.evaluation.result.verdict == "pass", why(done)


def test_a_sweep_that_trips_ends_off_and_passes_nothing(tmp_path: Path) -> None:
    tables = SWEEP + LIMITS + "on_from_max_V = 5.0\ngate_margin_min_V = 3.0\n"
    folder = shop(tmp_path / "w", "pmos-pass", tables=tables, faults=("sensor-open:case@6",))
    done, record = tried(folder)
    assert isinstance(done.error, Tripped)
    assert 0 < len(record.steps("supply/")) < len(VOLTS)
    assert [e["kind"] for e in record.events][-1] == "off"
    assert done.evaluation.result.verdict == "undecided"
    assert row(done, "on_from").verdict == "undecided"
    assert "the supply sweep is not whole: it came down to " in why(done)


@pytest.mark.parametrize(("most", "verdict"), [(3.0, "pass"), (1.6, "undecided")])
def test_on_at_the_lowest_voltage_measured_is_no_more_than_that(
    most: float, verdict: str, tmp_path: Path
) -> None:
    """It can show that a limit above it is met, and not that one below it is missed."""
    tables = f"[supply_sweep]\nvoltages_V = [1.5, 2.0, 9.0, 12.0]\n{LIMITS}on_from_max_V = {most}\n"
    done, record = tried(shop(tmp_path / "w", "pmos-pass", "wrong-part=-1.2", tables=tables))
    assert record.steps("supply/")[-1] == "supply/2.0"
    on = row(done, "on_from")
    assert on.measured == pytest.approx(1.93, abs=0.02)
    assert on.remark.startswith("no more than this")
    assert on.en is None
    assert on.verdict == verdict


def test_a_stage_that_waits_for_a_battery_is_shown_one_at_every_voltage(tmp_path: Path) -> None:
    tables = f"[supply_sweep]\nvoltages_V = [2.0, 6.0, 9.0, 12.0]\n{LIMITS}"
    done, record = tried(shop(tmp_path / "w", "pmos-sensed", tables=tables))
    assert done.error is None
    assert done.evaluation.result.verdict == "pass", why(done)
    # It cannot feed the load by its body diode, so the lowest voltage is left out.
    assert record.steps("supply/") == ["supply/12.0", "supply/9.0", "supply/6.0"]
    assert "2 V left out" in record.said("supply-sweep-ends")[0]
    connected = [words for words in record.said("connected") if words.startswith("the battery")]
    assert len(connected) == 1 + 3
    assert row(done, "on_from").remark.startswith("no more than this")
    for reading in record.at("supply/12.0", "guarded_voltage"):
        assert reading.value == pytest.approx(11.95, abs=0.1)


def test_a_diode_has_a_drop_at_either_end_and_no_gate(tmp_path: Path) -> None:
    drop = "[limits]\ndrop = [{ current_A = 2.0, max_V = 0.6 }]\n"
    done, _ = tried(shop(tmp_path / "w", "series-diode", tables=SWEEP + drop))
    assert done.evaluation.result.verdict == "pass", why(done)
    low, high = (m for m in done.evaluation.result.measurands if m.name == "supply_drop")
    assert ("2 V supply" in low.condition, "15 V supply" in high.condition) == (True, True)
    assert low.measured is not None
    # A junction in the lead drops what it drops, whatever the supply.
    assert low.measured == pytest.approx(high.measured, rel=0.02)
    assert low.en is not None
    assert low.en < 1
    names = {m.name for m in done.evaluation.result.measurands}
    assert not names & {"on_from", "useful_from", "gate_voltage", "gate_margin"}


# planned


def test_the_plan_tells_and_leaves_out_what_no_load_could_draw() -> None:
    trial = trial_of(planned("pmos-pass", "[supply_sweep]\nvoltages_V = [1, 1.5, 2, 5, 9, 12]\n"))
    # 1.1 V of body diode at the sheet's limit, and 0.8 V for the load.
    assert trial.plan.left_out_V == (1.0, 1.5)
    assert [rung.voltage_V for rung in trial.plan.rungs] == [12.0, 9.0, 5.0, 2.0]
    assert "1, 1.5 V left out" in trial.steps[1].text
    for envelope in trial.envelopes:
        assert envelope.current_limit_A == pytest.approx(1.1 * 2.0 + 0.05)
        assert not envelope.may_limit
    assert "12 V and lower supply voltages down to 2 V" in trial.cautions[0]


@pytest.mark.parametrize(
    ("topology", "tables", "stage", "words"),
    [
        ("pmos-pass", "[supply_sweep]\nvoltages_V = [0.5, 1, 1.5, 9]\n", "", "only 1 of its"),
        ("series-diode", SWEEP + "[limits]\non_from_max_V = 5\n", "", "D1 has no gate"),
        ("pmos-pass", SWEEP + "[limits]\ngate_margin_min_V = 5\n", "", "no [points.gate_voltage]"),
        ("pmos-pass", SWEEP + "[limits]\non_from_max_V = 2\n", "", "must begin below it"),
    ],
)
def test_what_cannot_be_measured_is_refused(
    topology: str, tables: str, stage: str, words: str
) -> None:
    with pytest.raises(InputError) as refused:
        planned(topology, tables, stage)
    assert words in str(refused.value)


def test_no_voltage_is_applied_that_is_predicted_to_break_a_gate() -> None:
    """A gate to ground stands the whole supply: 20 V of rating, 24 V of supply."""
    wide = text("pmos-pass", "", "[supply_sweep]\nvoltages_V = [3, 9, 12, 24]\n")
    stage = parse(StageFile, wide.replace("supply_max_V = 15.0", "supply_max_V = 24.0"), "s.toml")
    from benchkit.stage import build_stage

    bench = load(BenchFile, Path(__file__).parents[2] / "benchkit/files/starters/bench.toml")
    with pytest.raises(InputError, match=r"voltages_V ends at 24: Q1.*predicted to break a part"):
        plan_board(build_stage(stage, "s.toml"), bench)


@pytest.mark.parametrize(
    ("tables", "words"),
    [
        ("[supply_sweep]\nvoltages_V = [2, 3, 9, 16]\n", "it must end between stage.supply_min_V"),
        ("[supply_sweep]\nvoltages_V = [2, 3, 4, 5]\n", "it must end between stage.supply_min_V"),
        (SWEEP + "current_A = 3.5\n", "must not be above stage.current_max_A 3"),
        (
            SWEEP + "[limits]\nuseful_from_max_V = 9\n",
            "needs a limit in limits.drop at the current",
        ),
    ],
)
def test_a_table_that_contradicts_the_stage_is_refused(tables: str, words: str) -> None:
    with pytest.raises(InputError) as refused:
        made("pmos-pass", "", tables)
    assert words in str(refused.value)
