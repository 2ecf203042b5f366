"""What the reverse trial will do, worked out before anything is switched on."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from benchkit.errors import InputError
from benchkit.files import BenchFile, load
from benchkit.harness import DRAWING, reversed_from
from procedures.inputs import read_board
from procedures.plan import Plan, plan_board
from procedures.reverse import ReverseTrial
from procedures.reverse_plan import ReversePlan
from tests.benchkit.nine_stages import made, text
from tests.simulated_bench import workshop

REVERSE = "[reverse]\nsteps = 3\ndwell_s = 3.0\n"


def planned(
    folder: Path,
    tables: str = REVERSE,
    topology: str = "pmos-pass",
    bleeder_ohm: float | None = None,
) -> Plan:
    bench = load(BenchFile, workshop(folder, trial=True) / "bench.toml")
    limits = bench.bench.model_copy(update={"bleeder_ohm": bleeder_ohm})
    bench = bench.model_copy(update={"bench": limits})
    return plan_board(made(topology, tables=tables), bench)


def trial_of(plan: Plan) -> ReversePlan:
    [trial] = plan.trials
    assert isinstance(trial, ReverseTrial)
    return trial.plan


def test_the_plan_says_what_will_be_done(tmp_path: Path) -> None:
    plan = planned(tmp_path / "w")
    said = "\n".join(plan.lines())
    for words in (
        reversed_from(DRAWING, None).sentence(),
        DRAWING.sentence(),
        "5, 10, 15 V the wrong way round, the last for 3 s",
        "current limit 0.1 A",
        "outputs confirmed off and both ports dead before a lead is touched",
        "What trips it: the supply's own protection, its current limit being reached",
        "drop at 0.1, 2, 3 A again",
        "Wear eye protection",
    ):
        assert words in said
    assert trial_of(plan).full_V == 15.0
    for rung in trial_of(plan).rungs:
        assert not rung.may_limit
        assert rung.over_current_A == rung.current_limit_A == 0.1
        # 1.5 times 0.6 V, or 1.5 times what 0.7 uA of 1 uA at 30 V do in 1 Mohm.
        assert -1.1 < rung.guarded_min_V <= -0.9
        assert rung.energy_max_J < 20
    document = json.loads(json.dumps(plan.document(), allow_nan=False))
    assert [e["name"] for e in document["envelopes"]][1:4] == [
        "reverse 5 V", "reverse 10 V", "reverse 15 V",
    ]  # fmt: skip
    without = planned(tmp_path / "v", tables="")
    assert without.trials == ()
    assert "wrong way round" not in "\n".join(without.lines())


def test_the_guarded_port_trips_beyond_its_limit_and_beyond_honest_leakage(tmp_path: Path) -> None:
    limit = REVERSE + "[limits]\nguarded_reverse_max_V = 0.8\n"
    plan = planned(tmp_path / "w", limit)
    assert trial_of(plan).rungs[0].guarded_min_V == pytest.approx(-1.2)
    # A Schottky diode's 200 uA, of which next to nothing is needed to take 1 Mohm all the way down.
    plan = planned(tmp_path / "v", topology="series-diode")
    assert trial_of(plan).rungs[-1].guarded_min_V < -15
    assert "the current limit is what watches" in trial_of(plan).text()


def test_a_resistor_brings_the_trip_of_a_schottky_within_reach(tmp_path: Path) -> None:
    plan = planned(tmp_path / "w", topology="series-diode", bleeder_ohm=1000.0)
    for rung in trial_of(plan).rungs:
        # 1.5 times 0.6 V: 200 uA into 1 kohm are a fifth of a volt.
        assert rung.guarded_min_V == pytest.approx(-0.9)
    said = "\n".join(plan.lines())
    assert reversed_from(DRAWING, 1000.0).sentence() in said
    assert "put a resistor of 1000 ohm across the guarded port" in said
    assert "the current limit is what watches" not in said
    # 15 V, squared, in 1 kohm: 0.225 W, which any resistor stands.
    assert "one that stands" not in said


def test_a_resistor_that_gets_hot_is_said(tmp_path: Path) -> None:
    plan = planned(tmp_path / "w", bleeder_ohm=100.0)
    assert "one that stands 2.25 W" in trial_of(plan).caution
    assert "one that stands 2.25 W" in "\n".join(plan.lines())


@pytest.mark.parametrize(
    ("limit", "words"),
    [
        ("guarded_reverse_max_V = 15.0", "guarded_reverse_max_V is 15: it must be below the full"),
        ("leakage_max_A = 0.1", r"leakage_max_A is 0\.1: it must be below reverse\.current_"),
    ],
)
def test_a_limit_that_a_short_circuit_keeps_is_bad_input(limit: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        made("pmos-pass", tables=f"{REVERSE}[limits]\n{limit}\n")
    lower = limit.replace("15.0", "14.9").replace("= 0.1", "= 0.09")
    made("pmos-pass", tables=f"{REVERSE}[limits]\n{lower}\n")


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ("voltage_V = 29.0\n", r"reverse 29 V: .* 32\.4 V, above bench\.voltage_max_V = 32"),
        ("steps = 1\ncurrent_limit_A = 1.0\nvoltage_V = 28\n", r"be 28 W, above bench\.power_max"),
    ],
)
def test_what_the_bench_cannot_do_is_bad_input(keys: str, words: str, tmp_path: Path) -> None:
    bench = (workshop(tmp_path / "w", trial=True) / "bench.toml").read_text("utf-8")
    bench = bench.replace("power_max_W = 150.0", "power_max_W = 20.0")
    (tmp_path / "w" / "bench.toml").write_text(bench, "utf-8")
    stage = text("pmos-pass").replace("currents_A = [0.1, 0.5, 1.0, 2.0, 3.0]",
                                      "currents_A = [0.1, 0.5, 0.8, 1.0]")  # fmt: skip
    (tmp_path / "w" / "mine.toml").write_text(f"{stage}[reverse]\n{keys}", "utf-8")
    with pytest.raises(InputError, match=words):
        read_board(tmp_path / "w" / "mine.toml", tmp_path / "w" / "bench.toml")


@pytest.mark.parametrize("given", [True, False])
def test_nothing_is_planned_that_is_predicted_to_break_the_part(
    given: bool, tmp_path: Path
) -> None:
    folder = workshop(tmp_path / "w", trial=True)
    stage = text("series-diode").replace("reverse_voltage_max_V = 40", "reverse_voltage_max_V = 12")
    keys = "[reverse]\nvoltage_V = 15.0\n" if given else "[reverse]\n"
    (folder / "mine.toml").write_text(stage + keys, "utf-8")
    with pytest.raises(InputError) as caught:
        read_board(folder / "mine.toml", folder / "bench.toml")
    said = str(caught.value)
    assert "D1: reverse voltage would be 15 V, above its rating of 12 V" in said
    assert ("taken from stage.supply_max_V" in said) is not given
    assert len(said.splitlines()) == 1
