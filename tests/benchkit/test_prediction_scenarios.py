"""What each part stands, and every rating's margin."""

from __future__ import annotations

import pytest

from benchkit.prediction.connections import surroundings
from benchkit.prediction.scenarios import Scenario, scenario
from tests.benchkit.example_stages import PMOS, SCHOTTKY, build


def answer(text: str, name: str, *changes: tuple[str, str]) -> Scenario:
    stage = build(text, *changes)
    return scenario(stage, stage.draw(100, 4, corners=True), name, surroundings(stage.file))


def rating(found: Scenario, name: str) -> tuple[float, float, bool]:
    row = next(r for r in found.ratings if r.rating == name)
    assert row.margin == pytest.approx(row.limit - row.value)
    return row.value, row.limit, row.holds


def test_right_way_the_gate_sees_nearly_the_whole_supply() -> None:
    found = answer(PMOS, "right-way")
    value, limit, holds = rating(found, "gate-source voltage")
    assert 14.8 < value < 15.0
    assert (limit, holds) == (20.0, True)
    assert found.exposed_current_A == pytest.approx(5.0, rel=1e-6)
    assert rating(found, "drain current")[0] == pytest.approx(5.0, rel=1e-6)
    assert found.notes == []


def test_a_supply_above_the_gate_rating_is_said_in_words() -> None:
    found = answer(PMOS, "right-way", ("supply_max_V = 15.0", "supply_max_V = 24.0"))
    assert not rating(found, "gate-source voltage")[2]
    assert any(
        note.startswith("Q1: gate-source voltage would be 23.")
        and note.endswith("above its rating of 20 V")
        for note in found.notes
    )


def test_reversed_the_stage_stands_the_whole_supply() -> None:
    for text, name, volts in (
        (PMOS, "drain-source voltage", 15.0),
        (SCHOTTKY, "reverse voltage", 30.0),
    ):
        found = answer(text, "reversed-source")
        assert rating(found, name)[0] == pytest.approx(volts, abs=0.1)
        assert rating(found, name)[2]
        assert found.guarded_V > -0.5
        assert any("it is protected" in note for note in found.notes)


def test_reversed_a_hot_schottky_leaks_what_its_sheet_prints() -> None:
    """At the sheet's own voltage and temperature, onto a load that hardly matters."""
    found = answer(
        SCHOTTKY, "reversed-source",
        ("supply_max_V = 30", "supply_max_V = 40"), ("ambient_max_C = 60", "ambient_max_C = 125"),
        (", max_A = 200e-6", ""),
    )  # fmt: skip
    assert found.exposed_current_A == pytest.approx(-8e-3, rel=0.01)


def test_junction_is_judged_at_the_supply_that_drives_the_gate_least() -> None:
    """The channel's resistance is highest at supply_min_V."""
    high = answer(PMOS, "right-way", ("supply_min_V = 9.0", "supply_min_V = 12.0"))
    low = answer(PMOS, "right-way", ("supply_min_V = 9.0", "supply_min_V = 5.0"))
    assert rating(low, "junction temperature")[0] > rating(high, "junction temperature")[0] + 5


def test_parts_burn_what_the_stage_loses() -> None:
    found = answer(SCHOTTKY, "right-way")
    part = found.parts["D1"]
    assert part.power_W == pytest.approx(part.voltage_V * part.current_A, rel=1e-6)


def test_unknown_scenario() -> None:
    with pytest.raises(ValueError, match="'sideways' is not a scenario: one of right-way"):
        answer(PMOS, "sideways")


def test_a_current_at_its_very_rating_holds() -> None:
    """What the solver leaves over, parts in a thousand million, must not make it fail."""
    found = answer(
        SCHOTTKY, "right-way", ("average_current_max_A = 3", "average_current_max_A = 2")
    )
    value, limit, holds = rating(found, "average forward current")
    assert value == pytest.approx(limit, rel=1e-6)
    assert holds
    assert found.notes == []
