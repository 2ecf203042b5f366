"""The battery trial worked out before anything is on: circuits, one quadrant, ratings, leads."""

from __future__ import annotations

import re
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from benchkit.circuit import Resistor, network, solve
from benchkit.errors import InputError
from benchkit.evaluation.battery_trial_circuits import (
    BACK,
    FLAT,
    OFF,
    ON,
    ORDER,
    PRELOAD_A,
    Around,
    Spread,
    battery_A,
    circuits,
    solved,
)
from benchkit.files import BenchFile
from benchkit.files.loading import parse
from benchkit.harness import Harness
from benchkit.stage import Stage
from procedures.battery_trial_plan import BatteryPlan, plan_battery_trial
from procedures.inputs import read_board
from procedures.plan import plan_board
from procedures.starters import place_starters, starter
from procedures.trial import Forward
from tests.benchkit.nine_stages import STAGES, made

TRIAL = "[battery_trial]\n"
AROUND = Around(14.4, (0.1,), 12.0, 0.1, 0.8 * (0.1 - 14.4 / 470), 470.0, 1000.0)


def bench(supply: str = "supply-list") -> BenchFile:
    text = starter("bench.toml").replace('"supply-list"', f'"{supply}"')
    return parse(BenchFile, text, "bench.toml")


@cache
def forward_of() -> Forward:
    return plan_board(made("pmos-pass"), bench()).forward


def planned(stage: Stage, file: BenchFile | None = None) -> BatteryPlan:
    file, forward = file or bench(), forward_of()
    plan = plan_battery_trial(stage, file, forward.sweep, forward.home)
    assert plan is not None
    return plan


def standin(ohms: float) -> BenchFile:
    text = starter("bench.toml").replace("bleeder_ohm = 470.0", f"bleeder_ohm = {ohms:g}")
    return parse(BenchFile, text, "bench.toml")


@pytest.mark.parametrize(
    ("topology", "guards"),
    [*((t, "supply") for t in STAGES), ("pmos-pass", "load"), ("clamp", "load")],
)
def test_every_topology_is_planned_with_a_lead_change_a_state(topology: str, guards: str) -> None:
    # A battery that is hardly flat leaves one rung, which is enough here.
    stage = made(topology, f'guards = "{guards}"', TRIAL + "[battery]\nflat_V = 5.5\n")
    plan = planned(stage, bench("supply-select"))
    assert [(s.name, s.harness) for s in plan.states] == [
        (OFF, Harness(("battery",), (), crossed=True, bleeder_ohm=1000.0)),
        (ON, Harness(("battery",), ("supply",), crossed=True)),
        (FLAT, Harness(("battery",), ("supply",))),
        (BACK, Harness(("battery",), (), bleeder_ohm=1000.0)),
    ]
    for state in plan.states:
        for envelope in state.envelopes:
            drives = envelope.drives()
            # Nothing that is allowed without a fuse is passed, and protection is above the limit.
            assert drives["battery"].current_limit_A == 0.1
            assert all(d.current_limit_A < d.over_current_A < 0.11 for d in drives.values())
            assert ("supply" in drives) == (state.name in (ON, FLAT))
            assert envelope.source == ("supply" if state.name in (ON, FLAT) else "battery")
    clamps = topology.endswith("clamp")
    tied = "pass" in topology
    assert [s.conducts for s in plan.states][:2] == [clamps, clamps or tied]


@pytest.mark.parametrize(
    ("supply", "battery", "words"),
    [("supply-list", "supply-plain", "the supply gives there, whose dialect"),
     ("supply-select", "supply-list", "the battery's stand-in gives there, whose dialect")],
)  # fmt: skip
def test_a_clamp_needs_supplies_that_stay_at_their_limit(
    supply: str, battery: str, words: str
) -> None:
    text = starter("bench.toml").replace('"supply-plain"', f'"{battery}"', 1)
    if battery == "supply-list":
        text = text.replace('identity = "Oddenfell,SP-1830"',
                            'identity = "Oddenfell,SP-1830"\nchannel = "1"')  # fmt: skip
        text = text.replace(
            'dialect = "supply-list"          #', f'dialect = "{supply}"          #'
        )
    with pytest.raises(InputError, match=words):
        planned(made("fused-clamp", "", TRIAL), parse(BenchFile, text, "bench.toml"))


def test_only_what_is_asked_for_is_planned() -> None:
    plan = planned(made("pmos-pass", "", '[battery_trial]\nscenarios = ["flat-battery"]\n'))
    assert [state.name for state in plan.states] == [FLAT]
    # Up a flat battery's recovery, below half of the equipment's 12 V.
    assert plan.states[0].volts == (0.1, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
    assert plan_battery_trial(made("pmos-pass"), bench(), forward_of().sweep, plan.home) is None


def test_the_plan_and_its_cautions_are_told() -> None:
    board = plan_board(made("pmos-pass", "", TRIAL), bench())
    told = "\n".join(board.lines())
    assert told.index(f"battery/leads/{OFF}") < told.index(f"battery/leads/{ON}")
    assert "a stand-in that is charged sinks nothing, so its resistor takes it to 12 V" in told
    cautions = "\n".join(board.cautions)
    # 15 V across 470 ohm: Joule's law.
    assert "470 ohm is to stand 0.48 W" in cautions
    assert "Do not put a real battery in its place" in cautions
    assert "THE WRONG WAY ROUND" in cautions
    assert "eye protection" in cautions


# one quadrant


def test_a_bench_without_what_it_takes_is_refused() -> None:
    text = starter("bench.toml")
    text = re.sub(r"(?ms)^\[instruments\.battery\].*?\n\n", "", text)
    with pytest.raises(InputError, match='second supply of the bench file with stands_for = "ba'):
        planned(made("pmos-pass", "", TRIAL), parse(BenchFile, text, "bench.toml"))
    without = starter("bench.toml").replace("\nbleeder_ohm = 1000.0", "\n")
    file = parse(BenchFile, without, "bench.toml")
    with pytest.raises(InputError, match=r"bench\.bleeder_ohm, a resistor that stands for what eq"):
        planned(made("pmos-pass", "", TRIAL), file)
    only = '[battery_trial]\nscenarios = ["reversed-battery-on", "flat-battery"]\n'
    assert len(planned(made("pmos-pass", "", only), file).states) == 2


@pytest.mark.parametrize(
    ("ohms", "tables", "words"),
    [
        (100.0, "", r"takes 0.15 A of the stand-in's battery_trial.current_limit_A = 0.1 at 15 V"),
        (25.0, "current_limit_A = 1.0\n", r"0.04 A of the 0.05 A of a proof at 1 V"),
        (
            470.0, "[battery]\nemf_max_V = 9.0\n[equipment]\nset_V = 15.0\n",
            r"drive 0.0647 A into the battery's stand-in, which cannot sink, so that it rises to "
            r"15 V, too near its over-voltage level of 10.4 V",
        ),
    ],
)  # fmt: skip
def test_a_resistor_that_would_not_do_is_refused_and_one_that_would_is_named(
    ohms: float, tables: str, words: str
) -> None:
    stage = made("pmos-pass", "", TRIAL + tables)
    with pytest.raises(InputError, match=words) as refused:
        planned(stage, standin(ohms))
    assert "instruments.battery.bleeder_ohm is" in str(refused.value)
    found = re.search(r"(\d+) ohm or (more|less) would do", str(refused.value))
    assert found is not None
    enough, way = float(found[1]), found[2]
    # What it says would do does, and a good deal beyond it does not.
    assert planned(stage, standin(enough)).states
    with pytest.raises(InputError):
        planned(stage, standin(enough * (0.8 if way == "more" else 1.2)))


def test_a_limit_that_a_short_would_keep_is_refused() -> None:
    tables = TRIAL + "[limits]\nbattery_current_max_A = 0.06\n"
    with pytest.raises(InputError, match=r"battery_current_max_A is 0.06: it must be below 0.0545"):
        planned(made("pmos-pass", "", tables))


def test_nothing_is_energised_that_is_predicted_to_break_a_part() -> None:
    # Unprotected, the base-emitter junction breaks down at 7.2 V, its part's table says: 7.8 V
    # over 47 kilohm flow, beyond a rating of 6 V.
    bare = made("pmos-sensed", "", TRIAL, D1=None)
    with pytest.raises(InputError, match=r"reversed-battery-off: there Q2: .* above its rating of"):
        planned(bare)
    # With 20 V the other way and the equipment at 24 V its main part would stand 44 V of 40 V.
    only = 'scenarios = ["reversed-battery-on"]\n'
    series = TRIAL + only + "[battery]\nemf_max_V = 20.0\n[equipment]\nset_V = 24.0\n"
    with pytest.raises(
        InputError, match=r"reversed-battery-on: there D1: reverse voltage would be"
    ):
        planned(made("series-diode", "", series))


# what the circuits must come to, by hand


def point(topology: str, state: str, volts: float) -> tuple[float, float]:
    stage = made(topology)
    found = solved(stage, stage.typical(), AROUND, state, volts, Spread(), 25.0)
    assert found.solution.settled.all()
    assert np.max(found.solution.residual) < 1e-9
    return float(battery_A(state, found.exposed_A)[0]), float(found.guarded_V[0])


def test_a_flat_battery_through_a_closed_switch_rises_to_the_equipments_voltage() -> None:
    amps, guarded = point("pmos-pass", FLAT, 0.1)
    # Ohm's law at the resistor across the stand-in, and what its own output takes beside it.
    assert amps == pytest.approx(12.0 / 470 + 0.5 * PRELOAD_A, rel=2e-3)
    assert guarded == pytest.approx(12.0, abs=0.01)


def test_back_feed_through_a_closed_switch_is_ohms_law() -> None:
    amps, guarded = point("pmos-pass", BACK, 14.4)
    assert amps == pytest.approx(14.4 / 1000, rel=2e-3)
    assert guarded == pytest.approx(14.4, abs=0.01)


def test_a_clamp_takes_what_the_stand_in_gives_at_its_printed_drop() -> None:
    amps, guarded = point("clamp", OFF, 14.4)
    # The sheet's point: 0.70 V at 0.1 A. The resistor beside it takes 0.7 V over 470 ohm.
    assert guarded == pytest.approx(-0.70, abs=0.01)
    assert amps == pytest.approx(0.1 - 0.7 / 470, rel=2e-3)


@pytest.mark.parametrize("topology", ["pmos-pass", "nmos-pass"])
def test_a_gate_tied_to_ground_lets_the_reversed_battery_pull_the_equipment_down(
    topology: str,
) -> None:
    """The channel carries all of the equipment's limit with the guarded port little above the
    threshold (1.0 to 2.5 V by its sheet): a common-source stage with its gate at the far rail."""
    amps, guarded = point(topology, ON, 14.4)
    assert amps == pytest.approx(AROUND.supply_A, rel=0.01)
    assert 1.0 < guarded < 3.0


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_a_sensed_switch_keeps_the_equipments_voltage(topology: str) -> None:
    amps, guarded = point(topology, ON, 14.4)
    # Only through base resistor and protecting diode (0.5 to 0.7 V): Ohm's law.
    assert amps == pytest.approx((14.4 - 0.6) / 47e3, rel=0.03)
    assert guarded == pytest.approx(12.0, abs=0.01)


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_a_sensed_switch_does_not_see_a_flat_battery(topology: str) -> None:
    amps, _ = point(topology, FLAT, 0.1)
    assert abs(amps) < 1e-5
    # A base-emitter junction wants some 0.6 V (common practice, no source).
    started, _ = point(topology, FLAT, 1.0)
    assert started == pytest.approx(12.0 / 470 + 0.5 * PRELOAD_A, rel=0.01)


@pytest.mark.parametrize("state", ORDER)
def test_a_board_that_is_a_short_never_turns_the_stand_in_over(state: str) -> None:
    """It keeps its own polarity, and takes the equipment's supply down instead."""
    stage = made("pmos-pass")
    volts = {FLAT: 0.1}.get(state, 14.4)
    last = circuits(stage, AROUND, state, volts, Spread())[-1]
    ports = stage.ports
    short = Resistor("short", (ports.exposed_plus, ports.guarded_plus), 4e-3)
    inside = stage.elements(stage.typical(), 25.0)
    found = solve(network([*inside, short, *last.exposed, *last.guarded]), 1)
    exposed = float(found.between(ports.exposed_plus, ports.exposed_minus)[0])
    own = -exposed if state in (OFF, ON) else exposed
    expected = {FLAT: 12.0}.get(state, 14.4)
    assert own == pytest.approx(expected, rel=0.01)


def test_the_files_of_new_plan_the_charger(tmp_path: Path) -> None:
    place_starters(tmp_path)
    board = read_board(tmp_path / "stage-charger.toml", tmp_path / "bench.toml")
    [trial] = board.job.plan.trials
    assert [h.crossed for h in trial.harnesses] == [True, True, False, False]
