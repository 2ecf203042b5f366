"""How the main part of a simulated board dies: of a surge, or of heat."""

from __future__ import annotations

import math
from functools import partial
from pathlib import Path

import pytest

from benchkit.harness import REVERSED, Harness
from instruments.simulated.plant import Plant
from instruments.simulated.wear import SURGE_MARGIN, Endurance
from tests.benchkit.nine_stages import PARTS
from tests.instruments.simulated_fake import WITH_BATTERY
from tests.instruments.simulated_stage import VOLTS, Make, crossed, plant_with

SURGE_A2s = 300**2 * 8.3e-3 / 2
"""Of the rectifier, from its surge current: I2t of a half-sine is IFSM^2 t/2."""
CONTINUOUS_A = 6.0


@pytest.fixture
def make(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path)


def lived_s(plant: Plant, step_s: float, longest_s: float) -> float:
    """How long until the part is dead."""
    begun = plant.now()
    while plant.now() - begun < longest_s:
        if plant.truth("part_dead"):
            return plant.now() - begun
        plant.elapse(step_s)
    return math.inf


@pytest.mark.parametrize("step_s", [0.8, 0.1, 1e-3])
def test_what_flows_beyond_the_continuous_rating_spends_the_surge_rating(step_s: float) -> None:
    part = Endurance(1000.0, 500.0, 6.0)
    seconds = 500 / (25**2 - 6**2)
    assert part.until_change_s(25.0) == pytest.approx(seconds)
    for _ in range(round(0.8 / step_s)):
        part.pass_time(step_s, 25.0, 25.0)
    assert not part.dead
    part.pass_time(part.until_change_s(25.0), 25.0, 25.0)
    assert part.dead


def test_each_pulse_starts_anew() -> None:
    part = Endurance(1000.0, 500.0, 6.0)
    for _ in range(50):
        part.pass_time(0.8, -25.0, 25.0)
        part.pass_time(0.1, 6.0, 25.0)
    assert not part.dead
    part.pass_time(0.8, 25.0, 25.0)
    part.pass_time(0.1, 7.0, 25.0)  # still the same pulse
    part.pass_time(0.8, 25.0, 25.0)
    assert part.dead


def test_a_clamp_without_a_fuse_dies_of_what_the_supply_can_give(make: Make) -> None:
    """Within the drawn margin of its surge rating; then it is a short, for good."""
    plant = make("clamp", "heat-scale=0.1")
    plant.wire(REVERSED)
    plant.command_supply("supply", VOLTS, 25.0, True)
    seconds = lived_s(plant, 1e-3, 3.0)
    whole = SURGE_A2s / (25.0**2 - CONTINUOUS_A**2)
    assert SURGE_MARGIN[0] * whole < seconds - 0.004 < SURGE_MARGIN[1] * whole + 1e-3
    assert plant.voltage("guarded_voltage") == pytest.approx(-25 * 4e-3, rel=0.05)
    plant.command_supply("supply", VOLTS, 25.0, False)
    plant.elapse(60)
    plant.wire(Harness(("supply",), ("load",)))
    plant.command_supply("supply", VOLTS, 1.0, True)
    plant.elapse(1)
    assert plant.supply_terminals("supply")[2]
    assert plant.voltage("exposed_voltage") == pytest.approx(4e-3, rel=0.01)


def test_when_it_dies_does_not_depend_on_the_steps(make: Make) -> None:
    seconds = []
    for step in (1e-3, 1e-2):
        plant = make("clamp", "heat-scale=0.1")
        plant.wire(REVERSED)
        plant.command_supply("supply", VOLTS, 25.0, True)
        seconds.append(lived_s(plant, step, 3.0))
    assert abs(seconds[0] - seconds[1]) <= 1.1e-2


def test_a_clamp_within_its_rating_lives(make: Make) -> None:
    plant = crossed(make("clamp", "heat-scale=0.01"), limit=5.9)
    assert lived_s(plant, 50.0, 600.0) == math.inf
    assert 0.7 < -plant.voltage("guarded_voltage") < 1.1


def test_without_a_printed_surge_rating_only_heat_kills(make: Make) -> None:
    bare = PARTS["rectifier"].replace("surge_current_max_A = 300\n", "")
    plant = crossed(make("clamp", "heat-scale=0.01", parts={"D1": bare}), limit=20.0)
    assert lived_s(plant, 1.0, 30.0) == math.inf
    plant = crossed(make("clamp", parts={"D1": bare}), limit=20.0)
    assert lived_s(plant, 0.5, 60.0) < 30.0


def test_a_mosfet_dies_of_heat_and_is_a_short(make: Make) -> None:
    """A reversed battery on a gate that is tied, with the equipment on: the channel takes the sum
    of both voltages. No sheet says how hot is too hot; here more than 175 C by a margin."""
    plant = make("pmos-pass", bench_has=(WITH_BATTERY,))
    plant.wire(Harness(("battery",), ("supply",), crossed=True))
    plant.command_supply("supply", VOLTS, 1.0, True)
    plant.command_supply("battery", VOLTS, 2.0, True)
    plant.elapse(1)
    assert plant.truth("part_dead") == 0
    hottest = 0.0
    for _ in range(600):
        hottest = max(hottest, plant.truth("junction_C"))
        if plant.truth("part_dead"):
            break
        plant.elapse(0.1)
    assert 175 + 10 < hottest < 175 + 70
    assert plant.truth("drop") == pytest.approx(4e-3 * plant.truth("exposed_current"), rel=1e-3)
    plant.elapse(600)
    assert plant.truth("part_dead") == 1
    assert plant.truth("junction_C") < 40


def test_the_same_board_has_the_same_endurance(make: Make) -> None:
    def once() -> float:
        plant = make("clamp", "heat-scale=0.1")
        plant.wire(REVERSED)
        plant.command_supply("supply", VOLTS, 25.0, True)
        return lived_s(plant, 1e-2, 3.0)

    assert once() == once() < math.inf
