"""What a stage with a sensing transistor does: its junction, where it starts, and latching on.

Where no source is named, the expectation is common practice, no source.
"""

from __future__ import annotations

import re
from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.circuit import network, solve
from benchkit.prediction.connections import Conditions, surroundings
from benchkit.prediction.operating_point import OperatingPoint, connected, reached
from benchkit.prediction.scenarios import Scenario
from benchkit.prediction.sentences import starts_from
from benchkit.stage import Sample, Stage
from tests.benchkit.nine_stages import STAGES, made, resistor
from tests.benchkit.scenario_answers import answer, broken, says, value

Floats = NDArray[np.float64]

BLEED = {"R9": resistor(10e3, "bleed")}

# The sensing transistor


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_the_sensing_junction_breaks_down_unless_protected(topology: str) -> None:
    """It breaks down at 7.2 V, between 6 V and the mirror of that within tolerance; a diode across
    it leaves its own drop."""
    bare = answer(made(topology, D1=None), "reversed-battery-off")
    assert broken(bare) == [("Q2", "emitter-base voltage")]
    assert 6.0 < value(bare, "Q2", "emitter-base voltage") < 8.6
    assert says(bare, "Q2: emitter-base voltage would be [78]")
    guarded = answer(made(topology), "reversed-battery-off")
    assert broken(guarded) == []
    assert 0.4 < value(guarded, "Q2", "emitter-base voltage") < 0.8


def test_enough_resistance_protects_the_sensing_junction_too() -> None:
    """Where the sheet allows a reverse base current: (15 - 6 V)/47 kohm = 0.19 mA at most, and
    9 mA behind 1 kohm."""
    allowed = STAGES["pmos-sensed"]["Q2"] + "emitter_base_current_max_A = 1e-3\n"
    much = answer(made("pmos-sensed", D1=None, Q2=allowed), "reversed-battery-off")
    assert broken(much) == []
    assert 0.13e-3 < value(much, "Q2", "reverse base current") < 0.195e-3
    little = answer(
        made("pmos-sensed", D1=None, Q2=allowed, R2=resistor(1000, "base")), "reversed-battery-off"
    )
    assert broken(little) == [("Q2", "reverse base current")]
    assert 6.4e-3 < value(little, "Q2", "reverse base current") < 9.2e-3


def test_a_battery_of_4_volts_does_not_break_it_down() -> None:
    low = made("pmos-sensed", D1=None, tables="[battery]\nemf_max_V = 4.0\n")
    found = answer(low, "reversed-battery-off")
    assert broken(found) == []
    assert value(found, "Q2", "emitter-base voltage") == pytest.approx(4.0, abs=0.02)


# Flat batteries


def of_flat(volts: float, **parts: str) -> Stage:
    return made("pmos-sensed", tables=f"[battery]\nflat_V = {volts}\n", **parts)


@cache
def flat(volts: float) -> Scenario:
    return answer(of_flat(volts), "flat-battery")


def at_one_voltage(of: Stage, boards: Sample, volts: float, ambient_C: float) -> OperatingPoint:
    """Put on a charger that is running, and left at that voltage."""
    at = Conditions(np.full(boards.size, volts), np.full(boards.size, 3.0))
    steps = connected(of, surroundings(of.file), "flat-battery", at)
    return reached(of, boards, steps, ambient_C, ambient_C)


def charge_A(of: Stage, volts: float) -> Floats:
    """What flows into the battery, of the boards that ``answer`` asks."""
    return -at_one_voltage(of, of.draw(12, 4, corners=True), volts, 50.0).exposed_A


def starting_V(found: Scenario) -> float:
    said = re.search(r"a battery of ([\d.]+) V or more is charged", " ".join(found.notes))
    assert said is not None
    return float(said[1])


def test_a_flat_battery_never_starts_a_sensed_stage() -> None:
    """It takes a base-emitter drop of some 0.6 V; and the sentence says from where it starts."""
    assert np.abs(charge_A(of_flat(0.1), 0.1)).max() < 1e-4
    said = re.search(r"no more than ([\d.]+) ([nµ])A flow into a battery of 0.1 V; ",
                     " ".join(flat(0.1).notes))  # fmt: skip
    assert said is not None
    most = float(said[1]) * {"n": 1e-9, "µ": 1e-6}[said[2]]
    assert most == pytest.approx(charge_A(of_flat(0.1), 0.1).max(), rel=0.01)
    assert 0.4 < starting_V(flat(0.1)) < 0.8
    assert flat(4.0).exposed_current_A == pytest.approx(-3.0, rel=0.01)
    assert charge_A(of_flat(4.0), 4.0) == pytest.approx(3.0, rel=0.01)
    assert says(flat(4.0), "a flat battery of 4 V is charged, with (3|2.99) A at least")


def test_a_divider_at_the_base_moves_where_it_starts() -> None:
    """47 kohm above 10 kohm: 5.7 times 0.5 to 0.65 V, hardly moved by the base current."""
    of = of_flat(0.1, **BLEED)
    assert 5.7 * 0.45 < starting_V(answer(of, "flat-battery")) < 5.7 * 0.7
    assert np.abs(charge_A(of, 2.0)).max() < 0.05
    assert charge_A(of, 5.0) == pytest.approx(3.0, rel=0.01)


@pytest.mark.parametrize("parts", [{}, BLEED])
def test_where_it_starts_is_found_to_10_millivolts(parts: dict[str, str]) -> None:
    """A tenth of what the charger can give flows there, and does not 10 mV below."""
    of = of_flat(0.1, **parts)
    starts = starts_from(of, surroundings(of.file))
    assert starts is not None
    told = answer(of, "flat-battery", of.typical())
    assert starting_V(told) == pytest.approx(starts, rel=0.05)
    below, there = (
        -at_one_voltage(of, of.typical(), volts, 25.0).exposed_A[0]
        for volts in (starts - 0.0101, starts)
    )
    assert below < 0.3 <= there


def test_a_nearly_flat_battery_is_charged_through_a_channel_that_is_hardly_on() -> None:
    """A current-limited charger falls to the battery's voltage plus what keeps the gate driven, so
    3 A drop 1 to 2 V in the channel: several watts, far too hot; from 4 V on it is well."""
    hot, well = flat(1.0), flat(4.0)
    assert ("Q1", "junction temperature") in broken(hot)
    assert broken(well) == []
    assert well.guarded_V < 4.5


def test_a_battery_is_looked_at_while_it_recovers() -> None:
    """At 0.1 V nothing flows and nothing is burnt; on its way up the channel is half on."""
    of, found = of_flat(0.1), flat(0.1)
    assert ("Q1", "junction temperature") in broken(found)
    assert found.junction_C == np.inf
    said = re.search(
        r"with ([\d.]+) V in the battery Q1 burns up to ([\d.]+) W, before it has warmed",
        " ".join(found.notes),
    )
    assert said is not None
    boards = of.draw(12, 4, corners=True)
    burnt = {
        volts: at_one_voltage(of, boards, volts, 50.0).part("Q1").power_W.max()
        for volts in (0.1, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
    }
    assert burnt[0.1] < 0.01
    assert max(burnt, key=lambda volts: burnt[volts]) == float(said[1])
    assert burnt[float(said[1])] == pytest.approx(float(said[2]), rel=0.01)


def test_standing_a_flat_battery_is_asked_for_and_not_taken_for_granted() -> None:
    """Many a good charger never wakes one."""
    for topology in ("pmos-sensed", "nmos-sensed"):
        assert "flat-battery" not in made(topology).must_stand
    assert not flat(0.1).required
    asked = made("pmos-sensed", 'must_stand = ["right-way", "flat-battery"]')
    found = answer(asked, "flat-battery", asked.typical())
    assert found.required
    assert not found.stands


# Open terminals, and two operating points


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_open_terminals_of_a_sensed_stage_are_dead_or_latched(topology: str) -> None:
    """Nothing pulls its gate, so it stays off; once on, its own output holds it on. Both are
    operating points of one circuit: the voltmeter reads leakage in the one, 12 V in the other."""
    of = made(topology, R9=resistor(100e3, "bleed"))
    boards = of.typical()
    at = Conditions(np.array([12.0]), np.array([3.0]))
    last = connected(of, surroundings(of.file), "open", at)[-1]
    circuit = network([*of.elements(boards, 25.0), *last.exposed, *last.guarded])
    _, gate, source = of.wiring.parts["Q1"]
    sign = 1.0 if topology == "pmos-sensed" else -1.0
    off = {name: np.zeros(1) for name in circuit.node_names()}
    # The collector's inner node is the gate's, and all others are where the battery is not.
    off |= {node: np.full(1, sign * 12.0) for node in (gate, source, "Q2.collector")}
    on = {name: np.full(1, sign * 12.0) for name in circuit.node_names()}
    on |= {gate: np.zeros(1), "Q2.collector": np.zeros(1)}
    shown = []
    for start in (off, on):
        found = solve(circuit, 1, start, follow=True)
        assert found.settled.all()
        shown.append(found.between(of.ports.exposed_plus, of.ports.exposed_minus)[0])
    assert shown[0] < 0.05
    assert shown[1] == pytest.approx(12.0, abs=0.01)


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_both_operating_points_of_an_open_sensed_stage_are_told(topology: str) -> None:
    """Switched on with nothing connected it stays dead; its own output can hold it on."""
    of = made(topology, R9=resistor(100e3, "bleed"))
    assert says(answer(of, "open", of.typical()), r"the open terminals show [\d.]+ mV")
    found = answer(of, "open")
    # 1.2 uA are what the voltmeter of 10 Mohm takes from 12 V.
    assert says(found, "there is another operating point, with -1.2 µA into the exposed port")


def test_a_bleed_resistor_that_is_fitted_is_not_asked_for() -> None:
    assert not says(answer(made("pmos-sensed", **BLEED), "open"), "role bleed")
