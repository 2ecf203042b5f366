"""What is on the ports of a stage whose file leaves it open, and that this is told."""

from __future__ import annotations

from dataclasses import replace

import pytest

from benchkit.errors import InputError
from benchkit.prediction.connections import surroundings
from tests.benchkit.example_stages import PMOS, stage_file

GIVEN = """
[source]
resistance_ohm = 0.2
current_limit_A = 8
[battery]
emf_max_V = 14.4
flat_V = 0.0
resistance_ohm = 0.01
[equipment]
set_V = 13.8
limit_A = 4
off_ohm = 5000
passive_ohm = 6
hold_V = 11
hold_ohm = 0.1
[heat]"""


def test_what_a_file_leaves_open_follows_from_its_working_conditions() -> None:
    """9 to 15 V, nominally 12 V at 3 A and at most 5 A."""
    found = surroundings(stage_file(PMOS))
    assert found.battery_V == 15.0
    assert (found.set_V, found.hold_V) == (12.0, 12.0)
    assert found.limit_A == 5.0
    assert found.passive_ohm == pytest.approx(12.0 / 3.0)
    assert found.source_limit_A is None


def test_what_is_assumed_is_told_with_its_value_and_unit() -> None:
    found = surroundings(stage_file(PMOS))
    [said] = found.assumed
    for told in (
        "battery.emf_max_V = 15 V", "equipment.set_V = 12 V", "equipment.limit_A = 5 A",
        "equipment.passive_ohm = 4 ohm", "equipment.hold_V = 12 V",
        f"source.resistance_ohm = {found.source_ohm:g} ohm",
        f"battery.resistance_ohm = {found.battery_ohm:g} ohm",
        f"equipment.off_ohm = {found.off_ohm:g} ohm",
        f"equipment.hold_ohm = {found.hold_ohm:g} ohm",
    ):  # fmt: skip
        assert told in said


def test_what_a_file_gives_is_taken_and_not_called_assumed() -> None:
    found = surroundings(stage_file(PMOS, ("[heat]", GIVEN)))
    assert found.assumed == ()
    assert found == replace(
        found, source_ohm=0.2, source_limit_A=8, battery_V=14.4, battery_ohm=0.01, flat_V=0.0,
        set_V=13.8, limit_A=4, off_ohm=5000, passive_ohm=6, hold_V=11, hold_ohm=0.1,
    )  # fmt: skip


def test_one_given_key_leaves_the_others_assumed() -> None:
    given = "[battery]\nemf_max_V = 14.4\n[heat]"
    [said] = surroundings(stage_file(PMOS, ("[heat]", given))).assumed
    assert "emf_max_V" not in said
    assert "battery.resistance_ohm" in said


def test_a_default_that_is_written_out_is_no_assumption() -> None:
    plain = surroundings(stage_file(PMOS))
    written = f"[equipment]\noff_ohm = {plain.off_ohm}\n[heat]"
    [said] = surroundings(stage_file(PMOS, ("[heat]", written))).assumed
    assert "off_ohm" not in said


@pytest.mark.parametrize(
    ("table", "message"),
    [
        ("[source]\nresistance_ohm = 0",
         "source.resistance_ohm is 0, it must be greater than 0"),
        ("[battery]\nflat_V = -1",
         "battery.flat_V is -1, it must be greater than or equal to 0"),
        ("[battery]\nemf_V = 14",
         "battery.emf_V is not a key here; the nearest right one is emf_max_V"),
        ("[equipment]\nhold_V = \"12\"", "equipment.hold_V is '12', it must be a number"),
    ],
)  # fmt: skip
def test_one_mistake_is_one_sentence(table: str, message: str) -> None:
    with pytest.raises(InputError) as caught:
        stage_file(PMOS, ("[heat]", f"{table}\n[heat]"))
    assert str(caught.value) == f"stage.toml: {message}"
