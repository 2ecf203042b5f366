"""Relays and loop of the simulated bench, as the plant lives with them."""

from __future__ import annotations

import dataclasses
from functools import partial
from pathlib import Path

import pytest

from benchkit.harness import CHARGING, DRAWING, REVERSED, SENSED, Harness
from instruments.simulated.hookup import CONTACTS_OHM
from tests.instruments.simulated_fake import WITH_BATTERY, WITH_BLEEDER, WITH_SWITCH
from tests.instruments.simulated_stage import LIMIT, VOLTS, Make, energise, plant_with

STRAIGHT, CROSSED, BLEEDER = "301", "302", "303"


@pytest.fixture
def make(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path, bench_has=(WITH_BATTERY, WITH_SWITCH, WITH_BLEEDER))


@pytest.mark.parametrize("topology", ["pmos-pass", "nmos-pass"])
def test_the_pair_turns_the_supply_and_leaves_the_load(make: Make, topology: str) -> None:
    plant = make(topology)
    assert plant.harness == DRAWING
    plant.relay(STRAIGHT, False)
    assert plant.harness == Harness((), ("load",))
    energise(plant)
    assert plant.voltage("exposed_voltage") == pytest.approx(0, abs=1e-6)
    assert plant.supply_terminals("supply")[0] == pytest.approx(VOLTS)
    plant.command_supply("supply", VOLTS, LIMIT, False)
    plant.elapse(1)
    plant.relay(CROSSED, True)
    assert plant.harness == REVERSED
    energise(plant)
    assert plant.voltage("exposed_voltage") == pytest.approx(-VOLTS, abs=1e-3)
    assert plant.truth("hot_rewirings") == 0
    plant.wire(REVERSED)  # crossed by hand as well: right way round again
    assert plant.harness == DRAWING
    assert plant.truth("hot_rewirings") == 1
    assert plant.voltage("exposed_voltage") == pytest.approx(VOLTS, abs=1e-3)


def test_both_of_the_pair_short_what_is_between_them(make: Make) -> None:
    plant = make("pmos-pass")
    energise(plant)
    assert plant.truth("relay_shorts") == 0
    plant.relay(CROSSED, True)
    plant.relay(CROSSED, True)
    assert plant.truth("relay_shorts") == 1
    assert plant.truth("hot_rewirings") == 1
    plant.relay(BLEEDER, True)
    plant.relay(BLEEDER, False)
    assert plant.truth("relay_shorts") == 1
    plant.elapse(0.1)
    volts, amps, limits = plant.supply_terminals("supply")
    assert limits
    assert amps == pytest.approx(LIMIT, rel=1e-3)
    assert volts == pytest.approx(LIMIT * (CONTACTS_OHM + 0.018), rel=1e-3)
    assert plant.voltage("exposed_voltage") == pytest.approx(LIMIT * CONTACTS_OHM, rel=1e-2)
    assert abs(plant.truth("exposed_current")) < 1e-3
    plant.relay(STRAIGHT, False)
    assert plant.harness == REVERSED
    plant.elapse(0.1)
    assert plant.voltage("exposed_voltage") == pytest.approx(-VOLTS, abs=1e-3)
    assert (plant.truth("relay_shorts"), plant.truth("hot_rewirings")) == (1, 4)


def test_a_short_between_the_relays_is_across_the_port_too(make: Make) -> None:
    plant = make("clamp")
    plant.wire(Harness((), ("supply",)))
    energise(plant)
    plant.relay(CROSSED, True)
    plant.elapse(0.1)
    assert plant.supply_terminals("supply")[2]
    assert plant.truth("exposed_current") == pytest.approx(-LIMIT, rel=1e-3)
    assert plant.voltage("exposed_voltage") == pytest.approx(
        LIMIT * (CONTACTS_OHM + 0.01), rel=0.01
    )


def test_the_load_stays_at_its_port_with_both_relays_open(make: Make) -> None:
    plant = make("pmos-sensed")
    assert plant.harness == SENSED
    plant.relay(STRAIGHT, False)
    assert plant.harness == CHARGING


def test_moving_a_relay_with_something_live_is_counted(make: Make) -> None:
    plant = make("pmos-pass")
    plant.relay(STRAIGHT, True)  # as it is
    plant.relay("310", True)  # leads nowhere
    energise(plant)
    plant.relay("310", False)
    plant.relay(STRAIGHT, True)
    assert plant.truth("hot_rewirings") == 0
    plant.command_supply("supply", VOLTS, LIMIT, False)
    plant.relay(STRAIGHT, False)  # off, and not run down
    assert plant.truth("hot_rewirings") == 1
    plant.elapse(1)
    plant.relay(CROSSED, True)
    assert plant.truth("hot_rewirings") == 1
    plant.command_supply("battery", 6.0, LIMIT, True)  # connected to nothing, and on
    plant.relay(CROSSED, False)
    assert plant.truth("hot_rewirings") == 2


def test_the_bleeders_relay_puts_it_across_the_guarded_port(make: Make) -> None:
    plant = make("series-diode", "leaky=100")
    plant.relay(STRAIGHT, False)
    plant.relay(CROSSED, True)
    plant.relay(BLEEDER, True)
    assert plant.harness == dataclasses.replace(REVERSED, bleeder_ohm=1000.0)
    energise(plant)
    assert plant.voltage("guarded_voltage") == pytest.approx(-VOLTS * 1000 / 1100, abs=0.1)
    plant.wire(dataclasses.replace(DRAWING, bleeder_ohm=1000.0))  # a second one by hand
    assert plant.harness.bleeder_ohm == pytest.approx(500.0)
    plant.relay(BLEEDER, False)
    assert plant.harness.bleeder_ohm == 1000.0


def test_a_bleeder_that_is_not_there_shows_nothing_of_a_leak(make: Make) -> None:
    plant = make("series-diode", "leaky=100", wiring=("bleeder-missing",))
    plant.relay(BLEEDER, True)
    plant.wire(REVERSED)
    energise(plant)
    assert plant.voltage("guarded_voltage") == pytest.approx(-VOLTS, abs=0.05)


def test_a_board_goes_in_with_the_relay_straight(make: Make, tmp_path: Path) -> None:
    plant = make("pmos-pass")
    for route in (STRAIGHT, CROSSED, BLEEDER):
        plant.relay(route, route != STRAIGHT)
    plant.insert("S-1", str(tmp_path / "pmos-pass.toml"))
    assert plant.harness == DRAWING


def test_the_loop_opens_when_it_is_told_to(make: Make) -> None:
    plant = make("pmos-pass", wiring=("loop-open@2",))
    assert plant.line("loop")
    assert not plant.line("another")
    plant.elapse(2.1)
    assert not plant.line("loop")
    plant.clear_faults()
    assert plant.line("loop")
    plant.fault("loop-open", 0.0, 1.0)
    assert not plant.line("loop")


def test_a_bench_without_a_switch_has_neither_relay_nor_loop(tmp_path: Path) -> None:
    plant = plant_with(tmp_path, "pmos-pass")
    plant.relay(STRAIGHT, False)
    assert plant.harness == DRAWING
    assert not plant.line("loop")
