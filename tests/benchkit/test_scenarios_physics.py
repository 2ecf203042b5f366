"""What a practitioner expects to see fall out of the numbers, because it does on the bench.

Where no source is named, the expectation is common practice, no source; its figure is worked out
beside the check from the sheet's own points.
"""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.prediction.forward import forward
from benchkit.stage import Stage
from tests.benchkit.nine_stages import PARTS, STAGES, made, resistor
from tests.benchkit.scenario_answers import answer, broken, says, stage, value

P_MOSFET = STAGES["pmos-sensed"]["Q1"]


# Clamps and their fuse


def test_a_clamp_without_a_fuse_keeps_conducting() -> None:
    found = answer(made("clamp"), "reversed-battery-off")
    assert found.fuse is None
    assert says(found, "flow for as long as they are connected")
    assert says(found, "D1 has no steady temperature")
    assert broken(found) == [("D1", "average forward current"), ("D1", "junction temperature")]


def test_a_fuse_that_clears_in_time_saves_the_clamp() -> None:
    found = answer(made("fused-clamp"), "reversed-battery-off")
    assert found.fuse is not None
    assert found.fuse.coordinated
    assert found.fuse.clears_in_s < 0.02
    # 300 A through 8.3 ms of half-sine: IFSM^2 t/2.
    assert found.fuse.clamp_A2s == pytest.approx(300.0**2 * 8.3e-3 / 2)
    assert found.fuse.clamp_A2s is not None
    # Slowest fuse, cleared: 1.3 times twice its melting I2t at least.
    assert 1.3 * 2 * 40.0 <= found.fuse.let_through_A2s < found.fuse.clamp_A2s
    assert found.fuse.prospective_A == pytest.approx(15.0 / 0.02)
    assert broken(found) == []
    assert found.junction_C is None


@pytest.mark.parametrize(
    ("change", "rating"),
    [
        (("surge_current_max_A = 300", "surge_current_max_A = 120"), ("D1", "surge I2t")),
        (("breaking_A = 1000", "breaking_A = 500"), ("F1", "breaking capacity")),
        (("rated_voltage_V = 32", "rated_voltage_V = 24"), ("F1", "voltage to break")),
    ],
)
def test_each_reason_why_a_fuse_does_not_save_the_clamp(
    change: tuple[str, str], rating: tuple[str, str]
) -> None:
    """104 A2s let through against 120^2 * 4.15e-3 = 60 A2s; 750 A to break; once it is open, the
    battery's 15 V and the equipment's 12 V stand across it in series."""
    found = answer(stage("fused-clamp", change), "reversed-battery-on")
    assert broken(found) == [rating]
    assert found.fuse is not None
    assert not found.fuse.coordinated
    assert len(found.fuse.notes) == 2  # why, and what would do
    only_off = answer(stage("fused-clamp", change), "reversed-battery-off")
    assert broken(only_off) == ([] if rating[1] == "voltage to break" else [rating])


def test_a_fuse_too_large_for_a_tired_battery_never_opens() -> None:
    """Half an ohm of battery drives less than twice 20 A: the clamp goes on conducting."""
    found = answer(
        stage("fused-clamp", ("rated_current_A = 5", "rated_current_A = 20"),
              ("melting_A2s = 40", "melting_A2s = 640"), ("drop_V = 0.11", "drop_V = 0.4"),
              tables="[battery]\nresistance_ohm = 0.5\n"),
        "reversed-battery-off",
    )  # fmt: skip
    assert 20.0 < abs(found.exposed_current_A) < 30.0
    assert found.fuse is not None
    assert not found.fuse.coordinated
    assert np.isinf(found.fuse.clears_in_s)
    assert says(found, "the fuse never opens")
    assert ("D1", "average forward current") in broken(found)


def test_with_the_equipment_charged_both_sources_drive_the_fuse() -> None:
    """More flows than from the source alone; a short in its place would take 15 V/50 mohm."""
    found = answer(made("fused-clamp"), "reversed-source-charged")
    assert found.fuse is not None
    assert found.fuse.prospective_A == pytest.approx(15.0 / 0.05, rel=1e-6)
    off = answer(made("fused-clamp"), "reversed-source")
    assert abs(found.exposed_current_A) > abs(off.exposed_current_A)


# What blocks stands the sum


@pytest.mark.parametrize(
    ("topology", "part", "rating", "parts"),
    [
        ("series-diode", "D1", "reverse voltage",
         {"D1": PARTS["schottky"].replace("voltage_max_V = 40", "voltage_max_V = 25")}),
        ("pmos-sensed", "Q1", "drain-source voltage",
         {"Q1": P_MOSFET.replace("drain_source_max_V = 40", "drain_source_max_V = 25")}),
        ("nmos-sensed", "Q1", "drain-source voltage",
         {"Q1": STAGES["nmos-sensed"]["Q1"].replace("source_max_V = 40", "source_max_V = 25")}),
    ],
)  # fmt: skip
def test_blocking_with_the_equipment_on_takes_the_sum_of_both_voltages(
    topology: str, part: str, rating: str, parts: dict[str, str]
) -> None:
    """15 V of battery and 12 V of equipment: 27 V; a part of 25 V stands the battery alone."""
    weak = stage(topology, **parts)
    on, off = answer(weak, "reversed-battery-on"), answer(weak, "reversed-battery-off")
    assert value(on, part, rating) == pytest.approx(27.0, abs=0.05)
    assert value(off, part, rating) == pytest.approx(15.0, abs=0.05)
    assert (broken(on), broken(off)) == ([(part, rating)], [])
    assert says(on, f"{part}: {rating} would be 27 V, above its rating of 25 V")
    assert broken(answer(made(topology), "reversed-battery-on")) == []
    charged = answer(weak, "reversed-source-charged")
    assert value(charged, part, rating) == pytest.approx(15.0 + 12.0, abs=0.15)


# Thresholds


def test_the_drop_climbs_towards_the_threshold_and_ends_at_the_body_diodes() -> None:
    of = made("pmos-pass")
    volts = np.array([0.9, 1.2, 2.5, 3.0, 4.0, 6.0, 12.0])
    drops = forward(of, of.typical(), 2.0, volts, 25.0).drop_V[0]
    body = of.typical().laws["Q1"].body.forward_V(2.0, 25.0)  # type: ignore[union-attr]
    # Two volts or so of gate drive below the threshold nothing but the body diode conducts.
    assert drops[:2] == pytest.approx(float(np.squeeze(body)), rel=1e-3)
    assert np.all(np.diff(drops[1:]) < 0)
    assert drops[2] > 3 * drops[-1]
    assert drops[-1] == pytest.approx(2.0 * 0.0187, rel=0.1)


# Zener and resistor above the gate rating


@pytest.mark.parametrize(
    ("ohms", "beyond"),
    [
        (4700.0, []),
        (560.0, [("R1", "power")]),
        (270.0, [("R1", "power"), ("Z1", "power")]),
    ],
)
def test_zener_and_resistor_burn_what_the_gate_does_not_take(
    ohms: float, beyond: list[tuple[str, str]]
) -> None:
    """(24 V - 9.4 V)^2/R at most in the resistor, Vz (24 V - Vz)/R in the Zener."""
    of = stage(
        "pmos-pass-zener",
        ("supply_max_V = 15.0", "supply_max_V = 24.0"),
        R1=resistor(ohms, "gate"),
    )
    found = answer(of, "right-way")
    assert broken(found) == beyond
    # The Zener's voltage at that current: its typical 10 V at 5 mA, 12 ohm, within its window.
    assert 9.4 < -found.parts["Z1"].voltage_V < 11.6
    amps = (24.0 - 10.0) / ohms
    assert value(found, "Z1", "power") == pytest.approx(10.0 * amps, rel=0.15)
    assert value(found, "R1", "power") == pytest.approx(14.0 * amps, rel=0.15)
    typical = answer(of, "right-way", of.typical())
    parts = typical.parts
    assert parts["R1"].power_W == pytest.approx(parts["R1"].current_A ** 2 * ohms, rel=1e-6)


# Open terminals


@pytest.mark.parametrize("topology", ["clamp", "fused-clamp", "pmos-pass", "nmos-pass-zener"])
def test_open_terminals_of_a_stage_that_is_always_on_show_the_equipments_voltage(
    topology: str,
) -> None:
    found = answer(made(topology), "open")
    assert abs(found.exposed_current_A) == pytest.approx(12.0 / 1e7, rel=0.01)
    assert says(found, "the open terminals show 12 V")
    assert broken(found) == []


def test_no_scenario_of_a_plain_stage_has_a_second_operating_point() -> None:
    for topology in ("clamp", "series-diode", "pmos-pass"):
        for name in ("right-way", "reversed-battery-off", "back-feed"):
            assert not says(answer(made(topology), name), "another operating point")


def test_a_scenario_answers_what_is_asked() -> None:
    """Voltage, current and power of every part, and every rating with its margin."""
    of = made("pmos-sensed")
    for name in ("right-way", "reversed-source", "back-feed", "open"):
        found = answer(of, name, of.typical())
        assert set(found.parts) == set(of.file.parts)
        assert all(r.margin == pytest.approx(r.limit - r.value) for r in found.ratings)
        assert {r.rating for r in found.ratings if r.part == "Q1"} == {
            "drain-source voltage", "gate-source voltage", "reverse gate-source voltage",
            "drain current", "junction temperature",
        }  # fmt: skip
        assert found.worst_residual < 1e-9


# What is said must not be rosier than what is known


@pytest.mark.parametrize("amps", [7.0, 8.0, 9.5])
def test_between_its_gates_a_fuse_takes_what_its_standard_allows(amps: float) -> None:
    """UL 248-14 has a 5 A fuse open within an hour at 6.75 A and within 2 min at 10 A, no sooner
    (from memory, common catalogue knowledge); in between real ones may take minutes."""
    of = made("fused-clamp", tables=f"[source]\ncurrent_limit_A = {amps}\n")
    found = answer(of, "reversed-source")
    assert found.fuse is not None
    assert found.fuse.current_A == pytest.approx(amps, rel=0.01)
    assert found.fuse.clears_in_s >= 120.0


WEAK = PARTS["schottky"].replace("voltage_max_V = 40", "voltage_max_V = 25")
SLOW = "[source]\ncurrent_limit_A = 8\n"
OPENS = "[equipment]\nlimit_A = 40\n"


@pytest.mark.parametrize(
    ("of", "name", "protected", "stands"),
    [
        # It blocks 27 V, and may or may not.
        (made("series-diode"), "reversed-battery-on", True, True),
        (made("series-diode", D1=WEAK), "reversed-battery-on", True, False),
        (made("series-diode", D1=WEAK), "reversed-battery-off", True, True),
        # 8 A through a switch that its own output holds on, until a fuse of 5 A opens.
        (made("pmos-pass", tables=SLOW, F1=PARTS["fuse"]), "reversed-source-charged", True, False),
        # What the equipment has of its own is pulled down by the battery.
        (made("pmos-pass", tables=OPENS), "reversed-battery-on", False, False),
        # A clamp is asked for no more than its drop, and for as long as it lasts.
        (made("fused-clamp"), "reversed-battery-off", True, True),
        (made("clamp"), "reversed-battery-off", True, False),
    ],
)  # fmt: skip
def test_nothing_is_called_protected_beyond_a_rating_or_while_a_fuse_has_to_open(
    of: Stage, name: str, protected: bool, stands: bool
) -> None:
    found = answer(of, name)
    assert (found.protected, found.stands) == (protected, stands)
    uncertain = bool(broken(found)) or (found.fuse is not None and not found.fuse.coordinated)
    assert stands == (protected and not uncertain)
    assert not says(found, "it is protected$") or stands
    assert says(found, "as long as the parts outlive it$") == (protected and uncertain)
    document = found.document()
    assert (document["protected"], document["stands"]) == (protected, stands)
