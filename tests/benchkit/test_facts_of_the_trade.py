"""What anyone who protects circuits against reversed polarity knows, from sheets of invented parts.

Every figure in this file is common practice, no source, unless a test says otherwise.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.circuit import CurrentLoad, Emf, LimitedSource
from benchkit.parts.mosfet import MosfetLaws
from benchkit.parts.resistor import ResistorLaw
from benchkit.prediction import predict as prediction
from benchkit.prediction.connections import Connection, surroundings
from benchkit.prediction.forward import forward
from benchkit.prediction.heat import working_point
from benchkit.prediction.operating_point import OperatingPoint, reached
from benchkit.stage import Sample, Stage
from tests.benchkit.nine_stages import PARTS, resistor
from tests.benchkit.scenario_answers import answer, broken, stage

SMALL_SCHOTTKY = PARTS["schottky"].replace(
    "current_A = 3, typ_V = 0.45, max_V = 0.52", "current_A = 2, typ_V = 0.42, max_V = 0.50"
)
SIXTY_MILLIOHM = """
kind = "p-mosfet"
on_resistance = [
  { gate_V = 4.5, current_A = 2, typ_ohm = 0.090 },
  { gate_V = 10, current_A = 2, typ_ohm = 0.060, max_ohm = 0.075 },
]
threshold = { min_V = 2.0, max_V = 3.0, typ_V = 2.4, current_A = 250e-6 }
body_diode = [{ current_A = 2, typ_V = 1.3 }]
drain_source_max_V = 30
gate_source_max_V = 20
drain_current_max_A = 5
junction_max_C = 150
junction_to_case_K_per_W = 10
"""
STANDARD_LEVEL = """
kind = "p-mosfet"
on_resistance = [
  { gate_V = 6, current_A = 5, typ_ohm = 0.030 },
  { gate_V = 10, current_A = 5, typ_ohm = 0.020, max_ohm = 0.026 },
]
threshold = { min_V = 2.0, max_V = 4.0, typ_V = 3.0, current_A = 250e-6 }
body_diode = [{ current_A = 5, typ_V = 0.85 }]
drain_source_max_V = 40
gate_source_max_V = 20
drain_current_max_A = 12
junction_max_C = 150
junction_to_case_K_per_W = 4
"""
LOGIC_LEVEL = (
    STANDARD_LEVEL.replace("gate_V = 6", "gate_V = 2.5")
    .replace("gate_V = 10", "gate_V = 4.5")
    .replace("min_V = 2.0, max_V = 4.0, typ_V = 3.0", "min_V = 0.6, max_V = 1.4, typ_V = 1.0")
    .replace("gate_source_max_V = 20", "gate_source_max_V = 12")
)
ROOM = (
    ("case_to_ambient_K_per_W = 35", "case_to_ambient_K_per_W = 28"),
    ("case_to_ambient_max_K_per_W = 45", "case_to_ambient_max_K_per_W = 35"),
)
"""A small part on a few square centimetres of copper."""
HOT_SUPPLY = ("supply_max_V = 15.0", "supply_max_V = 24.0")


def connected(made: Stage, connection: Connection, boards: Sample | None = None) -> OperatingPoint:
    return reached(made, boards or made.typical(), [connection], 25.0, 25.0)


def test_small_schottky_burns_0_84_watts_at_2_amperes_and_gets_warm() -> None:
    """0.42 V at 2 A are 0.84 W; in a room it sits in the high forties of degrees."""
    made = stage("series-diode", *ROOM, D1=SMALL_SCHOTTKY)
    cold = forward(made, made.typical(), 2.0, 12.0, 25.0)
    assert cold.drop_V[0, 0] == pytest.approx(0.42, rel=0.01)
    assert cold.loss_W[0, 0] == pytest.approx(0.84, rel=0.01)
    steady = working_point(made, made.typical(), 2.0, 12.0, 25.0)
    assert 45.0 < steady.case_C[0, 0] < 50.0
    # Warm, the drop is less, by about the 0.8 mV/K that the sheet's hot point has at 1 A.
    fall = (0.42 - steady.drop_V[0, 0]) / (steady.junction_C[0, 0] - 25.0)
    assert fall == pytest.approx(0.8e-3, rel=0.2)


def test_60_milliohm_burn_0_24_watts_at_the_same_current() -> None:
    """I2R: 0.24 W, less than a third, and a case that only gets lukewarm."""
    made = stage("pmos-pass", *ROOM, Q1=SIXTY_MILLIOHM)
    assert forward(made, made.typical(), 2.0, 10.12, 25.0).loss_W == pytest.approx(0.24, rel=0.01)
    assert 30.0 < working_point(made, made.typical(), 2.0, 10.12, 25.0).case_C[0, 0] < 34.0


def test_body_diode_starts_the_switch_with_10_7_of_12_volts() -> None:
    """A body diode of 1.3 V at load leaves 10.7 V at the source, and the gate that far below it;
    that turns the channel fully on, and it shorts the body diode out."""
    made = stage("pmos-pass", Q1=SIXTY_MILLIOHM)
    typical = made.typical()
    laws = typical.laws["Q1"]
    assert isinstance(laws, MosfetLaws)
    none = MosfetLaws(replace(laws.channel, gain_A_per_V2=np.full(1, 1e-12)), laws.body)
    first = forward(made, replace(typical, laws={**typical.laws, "Q1": none}), 2.0, 12.0, 25.0)
    assert first.drop_V[0, 0] == pytest.approx(1.3, abs=0.01)
    assert first.gate_V == pytest.approx(-10.7, abs=0.01)
    # At that gate voltage the channel alone would carry the current with a tenth of a volt.
    amps, _, _ = laws.channel.at(25.0).current(np.full(1, 10.7), np.full(1, 0.12))
    assert amps[0] > 2.0
    then = forward(made, typical, 2.0, 12.0, 25.0)
    assert then.drop_V[0, 0] < 0.13
    assert then.gate_V == pytest.approx(-(12.0 - then.drop_V), rel=1e-9)


def test_the_switch_is_off_above_about_minus_2_volts() -> None:
    """Within 2 V of its source the gate lets no more through than the threshold's test current,
    even of the most willing part that the sheet allows."""
    made = stage("pmos-pass", Q1=SIXTY_MILLIOHM)
    laws = made.draw(500, 2).laws["Q1"]
    assert isinstance(laws, MosfetLaws)
    drain = np.full(500, 12.0)
    amps = {
        gate: laws.channel.at(25.0).current(np.full(500, gate), drain)[0]
        for gate in (0.0, 1.5, 2.0, 10.7)
    }
    assert amps[2.0].max() < 300e-6
    assert amps[1.5].max() < 1e-6
    assert amps[0.0].max() < 1e-12
    assert amps[10.7].min() > 5.0


def test_gates_stand_20_volts_so_24_volts_need_the_zener() -> None:
    plain = answer(stage("pmos-pass", HOT_SUPPLY, Q1=SIXTY_MILLIOHM), "right-way")
    assert broken(plain) == [("Q1", "gate-source voltage")]
    assert any("gate-source voltage would be 23" in note for note in plain.notes)
    limited = answer(stage("pmos-pass-zener", HOT_SUPPLY, Q1=SIXTY_MILLIOHM), "right-way")
    assert broken(limited) == []
    gate = next(one for one in limited.ratings if one.rating == "gate-source voltage")
    assert 9.4 < gate.value < 11.5  # the Zener's window, and what its dynamic resistance adds
    at_20 = stage("pmos-pass", ("supply_max_V = 15.0", "supply_max_V = 20.0"), Q1=SIXTY_MILLIOHM)
    assert broken(answer(at_20, "right-way")) == []


def test_low_supplies_need_a_logic_level_part(monkeypatch: pytest.MonkeyPatch) -> None:
    """A standard-level part (threshold 2 to 4 V) is made for 10 V of gate drive and is useless at
    5 V; a logic-level one (about 1 V) works from below 4 V."""
    monkeypatch.setattr(prediction, "SCENARIO_SAMPLES", 2)
    lowest, at_5 = {}, {}
    for name, part in (("standard", STANDARD_LEVEL), ("logic", LOGIC_LEVEL)):
        made = stage("pmos-pass", Q1=part)
        lowest[name] = prediction.predict(made, samples=4).lowest_useful_supply_V
        volts = np.array([3.3, 5.0, 12.0])
        drops = forward(made, made.corner(1), 2.0, volts, 25.0).drop_V[0]
        at_5[name] = drops[1] / drops[2]
    assert lowest["standard"] is not None
    assert lowest["logic"] is not None
    assert 5.0 < lowest["standard"] < 10.0
    assert 1.5 < lowest["logic"] < 4.0
    assert at_5["standard"] > 2.0
    assert at_5["logic"] < 1.35


def test_derating_is_that_of_the_worst_board_where_its_gate_is_driven_least(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """A curve that anyone may use has to hold for every board, at the lowest supply voltage too."""
    monkeypatch.setattr(prediction, "SCENARIO_SAMPLES", 2)
    made = stage("pmos-pass", Q1=STANDARD_LEVEL)
    curve = prediction.predict(made, samples=4).derating
    derated = [(ambient, amps) for ambient, amps in curve if 0 < amps < 3.0]
    assert len(derated) >= 4
    for ambient, amps in derated:
        worst = working_point(made, made.corner(1), amps, 9.0, ambient).junction_C
        assert worst == pytest.approx(150.0, abs=0.01)
        for other, volts in ((made.corner(1), 12.0), (made.typical(), 9.0)):
            assert working_point(made, other, amps, volts, ambient).junction_C < worst - 0.5
    last = max(ambient for ambient, amps in curve if amps == 3.0)  # what it is made for
    assert working_point(made, made.corner(1), 3.0, 9.0, last).junction_C < 150.0


@pytest.mark.parametrize("topology", ["pmos-pass", "nmos-pass"])
def test_gate_at_ground_protects_a_passive_load_from_a_reversed_source(topology: str) -> None:
    found = answer(stage(topology, F1=PARTS["fuse"]), "reversed-source")
    assert abs(found.guarded_V) < 0.01
    assert abs(found.exposed_current_A) < 1e-4
    assert found.fuse is None
    assert broken(found) == []


@pytest.mark.parametrize("topology", ["pmos-pass", "nmos-pass"])
@pytest.mark.parametrize("name", ["reversed-source-charged", "reversed-battery-on"])
def test_gate_at_ground_pops_the_fuse_where_the_equipment_holds_its_own(
    topology: str, name: str
) -> None:
    """The voltage that is left on the guarded side keeps the switch on against the battery."""
    made = stage(topology, tables="[equipment]\nlimit_A = 40\n", F1=PARTS["fuse"])
    found = answer(made, name)
    assert abs(found.exposed_current_A) > 5 * 5.0
    assert found.fuse is not None
    assert np.isfinite(found.fuse.clears_in_s)
    assert found.guarded_V < 0.75 * 12.0
    assert ("Q1", "drain current") in broken(found)


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
@pytest.mark.parametrize("name", ["reversed-source-charged", "reversed-battery-on"])
def test_gate_held_at_source_is_safe_either_way(topology: str, name: str) -> None:
    """It is pulled only by a battery that is the right way round."""
    made = stage(topology, tables="[equipment]\nlimit_A = 40\n", F1=PARTS["fuse"])
    found = answer(made, name)
    assert abs(found.exposed_current_A) < 1e-3
    assert found.guarded_V > 0.99 * 11.9
    assert found.fuse is None
    assert broken(found) == []
    right = answer(made, "right-way")
    assert right.exposed_current_A == pytest.approx(-3.0, rel=1e-3)
    assert broken(right) == []


def test_a_lone_clamp_shorts_a_reversed_battery_for_as_long_as_it_lasts() -> None:
    found = answer(stage("clamp"), "reversed-battery-off")
    # All that the battery's and the diode's resistance let through.
    assert abs(found.exposed_current_A) > 200.0
    assert found.fuse is None
    assert found.junction_C == np.inf
    assert ("D1", "average forward current") in broken(found)
    assert any(note.endswith("flow for as long as they are connected") for note in found.notes)


def test_a_blown_clamp_shorts_the_output_and_has_no_forward_drop() -> None:
    """Backwards at 1 A a good output shows the clamp's drop, a blown one next to nothing; and the
    right way round it shorts the supply."""
    made = stage("clamp")
    good = made.typical()
    blown = replace(good, laws={**good.laws, "D1": ResistorLaw(np.full(1, 0.02))})
    exposed = (made.ports.exposed_plus, made.ports.exposed_minus)
    backwards = Connection((CurrentLoad("test", exposed, 1.0),), ())
    assert connected(made, backwards, good).exposed_V == pytest.approx(-0.82, abs=0.02)
    assert connected(made, backwards, blown).exposed_V == pytest.approx(-0.02, rel=1e-6)
    driven = Connection((), (LimitedSource("on", exposed, 12.0, 3.0),))
    assert connected(made, driven, good).exposed_V == pytest.approx(12.0, abs=0.01)
    assert connected(made, driven, blown).exposed_V == pytest.approx(3.0 * 0.02, rel=0.01)


@pytest.mark.parametrize("share", [0.1, 1 / 3])
def test_a_lead_acid_battery_is_charged_to_14_4_volts(share: float) -> None:
    """At a tenth to a third of its capacity in amperes, tapering off at 14.4 V."""
    limit = 7.0 * share  # of 7 Ah
    made = stage("pmos-sensed", tables=f"[equipment]\nset_V = 14.4\nlimit_A = {limit}\n")
    around = surroundings(made.file)
    guarded = (made.ports.guarded_plus, made.ports.guarded_minus)
    exposed = (made.ports.exposed_plus, made.ports.exposed_minus)
    found = {}
    for emf in (11.5, 12.7, 14.4):
        found[emf] = connected(
            made,
            Connection(
                (Emf("battery", exposed, emf, 0.03),),
                (LimitedSource("charger", guarded, around.set_V, around.limit_A),),
            ),
        )
    for emf in (11.5, 12.7):
        assert -found[emf].exposed_A == pytest.approx(limit, rel=0.01)
        assert found[emf].exposed_V == pytest.approx(emf + 0.03 * limit, abs=0.002)
        # The switch takes millivolts of what the charger gives.
        assert 0.0 < (found[emf].guarded_V - found[emf].exposed_V)[0] < 0.08
    assert abs(found[14.4].exposed_A[0]) < 0.1 * limit
    assert found[14.4].exposed_V == pytest.approx(14.4, abs=0.01)


def test_a_gate_resistor_does_not_change_the_steady_state() -> None:
    """No current flows into a gate."""
    low, high = (
        forward(made, made.typical(), 2.0, 12.0, 25.0).drop_V
        for made in (
            stage("pmos-pass", R1=resistor(10, "gate")),
            stage("pmos-pass", R1=resistor(1e6, "gate")),
        )
    )
    assert low == pytest.approx(high, rel=1e-6)
