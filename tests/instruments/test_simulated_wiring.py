"""Leads of the simulated bench moved, rightly and wrongly; its supply at either port."""

from __future__ import annotations

import dataclasses
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from benchkit.harness import CHARGING, DRAWING, REVERSED, Harness
from instruments.simulated.terminals import BLEED_S
from tests.instruments.simulated_stage import LIMIT, VOLTS, Make, crossed, energise, plant_with


@pytest.fixture
def make(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path)


@pytest.mark.parametrize("wiring", [DRAWING, REVERSED])
def test_an_output_runs_down_across_its_own_terminals(make: Make, wiring: Harness) -> None:
    plant = make("nmos-pass")
    plant.wire(wiring)
    energise(plant)
    plant.command_supply("supply", VOLTS, LIMIT, False)
    volts = []
    for _ in range(12):
        plant.elapse(0.02)
        volts.append(plant.supply_terminals("supply")[0])
        assert plant.voltage("exposed_voltage") == pytest.approx(wiring.sign * volts[-1], abs=0.02)
    assert (np.diff(volts) < 1e-9).all()
    assert volts[0] > 1
    assert volts[-1] < 1e-3


def test_a_stuck_crossing_leaves_the_supply_as_it_was(make: Make) -> None:
    plant = crossed(make("pmos-pass", wiring=("crossing-stuck",)))
    assert plant.harness == DRAWING
    assert plant.voltage("exposed_voltage") == pytest.approx(VOLTS, abs=1e-3)
    plant = make("pmos-pass", wiring=("crossing-stuck@5",))  # from five seconds on
    plant.wire(REVERSED)
    plant.elapse(6)
    plant.wire(DRAWING)
    assert plant.harness == REVERSED


def test_moving_leads_with_something_on_is_counted(make: Make, tmp_path: Path) -> None:
    plant = make("pmos-pass")
    plant.wire(REVERSED)
    plant.wire(DRAWING)
    assert plant.truth("hot_rewirings") == 0
    energise(plant)
    plant.wire(DRAWING)  # as it is
    assert plant.truth("hot_rewirings") == 0
    plant.wire(REVERSED)
    assert plant.truth("hot_rewirings") == 1
    assert plant.voltage("exposed_voltage") == pytest.approx(-VOLTS, abs=1e-3)
    plant.command_supply("supply", VOLTS, LIMIT, False)
    plant.wire(DRAWING)  # off, and its output has not run down
    assert plant.truth("hot_rewirings") == 2
    plant.elapse(1)
    plant.wire(REVERSED)
    assert plant.truth("hot_rewirings") == 2
    plant.insert("S-1", str(tmp_path / "pmos-pass.toml"))
    assert plant.harness == DRAWING


def test_an_instrument_is_at_one_port(make: Make) -> None:
    plant = make("pmos-pass")
    with pytest.raises(ValueError, match="the supply cannot be at both ports"):
        plant.wire(Harness(("supply",), ("supply",)))
    plant.wire(Harness((), ()))
    energise(plant)
    assert plant.voltage("exposed_voltage") == pytest.approx(0, abs=1e-6)
    volts, amps, limits = plant.supply_terminals("supply")
    assert volts == pytest.approx(VOLTS)
    assert (amps, limits) == (0.0, False)


def test_supply_and_load_may_change_places(make: Make) -> None:
    """As at a charger's output: the current flows out of the exposed plus, through the shunt."""
    plant = make("clamp")
    plant.wire(CHARGING)
    energise(plant, load=0.5)
    volts, amps = plant.load_terminals()
    assert amps == pytest.approx(0.5 + BLEED_S * volts, rel=1e-6)
    assert plant.truth("exposed_current") == pytest.approx(-amps, rel=1e-6)
    shunt = plant.voltage("exposed_current") / plant.truth("exposed_current")
    assert plant.voltage("exposed_voltage") - volts == pytest.approx(amps * shunt, rel=1e-6)
    assert plant.supply_terminals("supply")[0] - plant.voltage("guarded_voltage") == pytest.approx(
        0.018 * amps, rel=1e-3
    )


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_a_charger_gives_nothing_while_there_is_no_battery(make: Make, topology: str) -> None:
    plant = make(topology)
    plant.wire(Harness((), ("supply",)))
    energise(plant)
    assert plant.voltage("guarded_voltage") == pytest.approx(VOLTS, abs=0.01)
    assert abs(plant.voltage("exposed_voltage")) < 0.6
    assert abs(plant.truth("gate_voltage")) < 0.5


def test_a_resistor_across_the_guarded_port_divides_with_a_leak(make: Make) -> None:
    found = {}
    for bleeder_ohm in (None, 1000.0):
        plant = make("series-diode", "leaky=100")
        plant.wire(dataclasses.replace(REVERSED, bleeder_ohm=bleeder_ohm))
        energise(plant)
        found[bleeder_ohm] = plant.voltage("guarded_voltage"), plant.truth("exposed_current")
    assert found[None][0] == pytest.approx(-VOLTS, abs=0.05)
    assert abs(found[None][1]) < 1e-3
    assert found[1000.0][0] == pytest.approx(-VOLTS * 1000 / 1100, abs=0.1)
    assert found[1000.0][1] == pytest.approx(-VOLTS / 1100, rel=0.02)
    plant = make("series-diode")
    plant.wire(dataclasses.replace(DRAWING, bleeder_ohm=1000.0))  # right way round too
    energise(plant)
    assert plant.truth("exposed_current") == pytest.approx(VOLTS / 1000, rel=0.05)
