"""Two sources on the simulated bench: the supply, and the battery's stand-in with its bleeder."""

from __future__ import annotations

from functools import partial
from itertools import pairwise
from pathlib import Path

import pytest

from benchkit.harness import CHARGING, DRAWING, SENSED, Harness
from instruments.simulated.plant import Plant
from instruments.simulated.terminals import BLEED_S
from instruments.simulated.timebase import VirtualTime
from tests.instruments.simulated_fake import WITH_BATTERY, Bench, bench_file
from tests.instruments.simulated_stage import VOLTS, Make, kick, plant_with

LEAD_OHM, BLEEDER_OHM, SHUNT_OHM = 0.018, 100.0, 0.01
BOTH = Harness(("supply", "battery"), ("load",))


@pytest.fixture
def make(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path, bench_has=(WITH_BATTERY,))


@pytest.fixture
def without(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path)


def on(plant: Plant, battery_V: float = VOLTS, limit: float = 5.0, load: float = 0.0) -> None:
    plant.command_supply("battery", battery_V, limit, True)
    plant.command_load("CURR", load, load > 0)
    plant.elapse(0.5)


@pytest.mark.parametrize(
    ("topology", "normal", "alone"),
    [
        ("pmos-pass", DRAWING, DRAWING), ("nmos-pass-zener", DRAWING, DRAWING),
        ("series-diode", DRAWING, DRAWING), ("clamp", CHARGING, CHARGING),
        ("fused-clamp", CHARGING, CHARGING), ("pmos-sensed", SENSED, CHARGING),
        ("nmos-sensed", SENSED, CHARGING),
    ],
)  # fmt: skip
def test_a_board_goes_in_as_its_stage_is_used(
    make: Make, without: Make, topology: str, normal: Harness, alone: Harness
) -> None:
    assert make(topology).harness == normal
    assert without(topology).harness == alone


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_a_battery_switches_a_sensed_stage_on_and_it_stays_on(make: Make, topology: str) -> None:
    """Then the supply drives the load through it: what the sensing transistor sees is the exposed
    port, whoever holds it up."""
    plant = make(topology)
    plant.command_supply("supply", VOLTS, 5.0, True)
    plant.elapse(1)
    assert abs(plant.voltage("exposed_voltage")) < 0.6
    assert abs(plant.voltage("gate_voltage")) < 0.5
    kick(plant)
    assert plant.supply_terminals("battery")[0] == pytest.approx(VOLTS, abs=0.1)
    sign = -1 if topology.startswith("p") else 1
    assert sign * plant.voltage("gate_voltage") > 8
    assert abs(plant.voltage("drop")) < 0.02
    plant.command_load("CURR", 2.0, True)
    plant.elapse(1)
    volts, amps = plant.load_terminals()
    assert amps == pytest.approx(2.0, rel=1e-3)
    assert volts == pytest.approx(VOLTS, abs=0.2)
    assert plant.truth("exposed_current") == pytest.approx(-amps - volts / BLEEDER_OHM, rel=1e-3)
    assert abs(plant.voltage("drop")) < 0.1
    plant.command_supply("supply", VOLTS, 5.0, False)
    plant.elapse(1)
    assert abs(plant.voltage("exposed_voltage")) < 0.1
    plant.command_supply("supply", VOLTS, 5.0, True)  # and it has forgotten
    plant.elapse(1)
    assert abs(plant.voltage("exposed_voltage")) < 0.6


def test_both_sources_count_in_the_exposed_current(make: Make) -> None:
    """What both give is what leaves: the load's, the part's loss, and the heat of the leads."""
    plant = make("pmos-pass")
    plant.wire(BOTH)
    plant.command_supply("supply", VOLTS, 1.5, True)
    on(plant, VOLTS - 0.3, load=3.0)
    volts, amps, limits = plant.supply_terminals("supply")
    battery_volts, output_amps, _ = plant.supply_terminals("battery")
    # Its output feeds the resistor across it as well.
    battery_amps = output_amps - battery_volts / BLEEDER_OHM
    assert limits
    assert amps == pytest.approx(1.5, rel=1e-3)
    load_volts, load_amps = plant.load_terminals()
    current = plant.truth("exposed_current")
    assert current == pytest.approx(amps + battery_amps, rel=1e-9)
    assert current == pytest.approx(load_amps, rel=1e-4)
    port = plant.voltage("exposed_voltage") * current
    heat = LEAD_OHM * (amps**2 + battery_amps**2) + SHUNT_OHM * current**2
    assert volts * amps + battery_volts * battery_amps == pytest.approx(port + heat, rel=1e-9)
    assert port == pytest.approx(load_volts * load_amps + plant.truth("loss"), rel=1e-6)
    assert battery_volts - volts == pytest.approx(LEAD_OHM * (battery_amps - amps), rel=1e-6)


def test_a_stand_in_does_not_sink_and_its_bleeder_does(make: Make) -> None:
    """What is driven into it its bleeder takes, and when it is on its small preload."""
    plant = make("pmos-pass")
    plant.wire(BOTH)
    plant.command_supply("supply", VOLTS, 1.5, True)
    plant.elapse(1)
    volts, amps, limits = plant.supply_terminals("battery")
    assert volts == pytest.approx(VOLTS, abs=0.01)
    assert amps == 0
    assert plant.truth("exposed_current") == pytest.approx(
        plant.supply_terminals("supply")[1] - volts / BLEEDER_OHM, rel=1e-6
    )
    assert not limits
    on(plant, 5.0)
    assert -0.006 < plant.supply_terminals("battery")[1] <= 0
    plant.command_supply("supply", VOLTS, 1.5, False)
    plant.elapse(1)  # now the stand-in feeds the port, and the supply's own discharger
    assert plant.supply_terminals("battery")[0] == pytest.approx(5.0, abs=0.01)
    # Into the supply's discharger of 50 ohm, and into its own resistor.
    assert plant.supply_terminals("battery")[1] == pytest.approx(0.1 + 5.0 / BLEEDER_OHM, abs=0.01)


def test_off_and_alone_its_terminals_are_dead(make: Make) -> None:
    plant = make("pmos-sensed")
    on(plant, 6.0)
    assert plant.supply_terminals("battery")[0] == pytest.approx(6.0, abs=1e-3)
    plant.command_supply("battery", 6.0, 1.0, False)
    volts = []
    for _ in range(10):
        plant.elapse(0.05)
        volts.append(plant.supply_terminals("battery")[0])
    assert all(later < earlier + 1e-9 for earlier, later in pairwise(volts))
    assert volts[0] > 0.1
    assert abs(volts[-1]) < 1e-3


@pytest.mark.parametrize("topology", ["pmos-pass", "pmos-sensed", "nmos-pass", "nmos-sensed"])
def test_a_reversed_battery_and_equipment_that_is_on(make: Make, topology: str) -> None:
    """A gate tied to the other lead stays driven by the guarded side, so that battery and
    equipment drive a current through the channel; the sensed gate lets go."""
    plant = make(topology)
    plant.wire(Harness(("battery",), ("supply",), crossed=True))
    plant.command_supply("supply", VOLTS, 1.0, True)
    on(plant, VOLTS, 2.0)
    exposed, guarded = plant.voltage("exposed_voltage"), plant.voltage("guarded_voltage")
    if topology.endswith("sensed"):
        assert exposed == pytest.approx(-VOLTS, abs=0.1)
        assert guarded == pytest.approx(VOLTS, abs=0.1)
        assert plant.voltage("drop") == pytest.approx(-2 * VOLTS, abs=0.1)
        assert abs(plant.truth("exposed_current")) < 1e-3
    else:
        assert plant.truth("exposed_current") == pytest.approx(-1.0, rel=1e-3)
        assert plant.supply_terminals("supply")[2]
        assert 1.0 < guarded < 2.5  # about the threshold: the channel limits it there
        assert plant.truth("loss") == pytest.approx(1.0 * (guarded - exposed), rel=1e-3)


def test_the_crossing_turns_sources_and_not_the_load(make: Make) -> None:
    plant = make("clamp", "open")
    plant.wire(Harness(("battery", "load"), (), crossed=True))
    on(plant, 5.0)
    assert plant.voltage("exposed_voltage") == pytest.approx(-5.0, abs=1e-3)
    assert plant.load_terminals()[0] == pytest.approx(-5.0, abs=1e-3)
    assert plant.supply_terminals("battery")[0] == pytest.approx(5.0, abs=1e-3)
    volts, amps = plant.load_terminals()
    assert amps == pytest.approx(BLEED_S * volts)


@pytest.mark.parametrize(
    ("harness", "sentence"),
    [
        (Harness((), ("battery",)), "cannot be at the guarded port"),
        (Harness(("supply",), ("supply",)), "the supply cannot be at both ports"),
        (Harness(("load", "battery"), ("load",)), "the load cannot be at both ports"),
        (Harness(("load", "load"), ()), "the load is at the exposed port twice"),
    ],
)
def test_what_cannot_be_wired_is_refused(make: Make, harness: Harness, sentence: str) -> None:
    plant = make("pmos-sensed")
    with pytest.raises(ValueError, match=sentence):
        plant.wire(harness)
    assert plant.harness == SENSED


def test_without_a_stand_in_nobody_can_connect_it(without: Make) -> None:
    with pytest.raises(ValueError, match='stands_for = "battery"'):
        without("pmos-sensed").wire(SENSED)


def test_an_empty_fixture_shows_what_is_at_its_terminals(tmp_path: Path) -> None:
    plant = Plant(bench_file(WITH_BATTERY), tmp_path / "bench.toml", VirtualTime())
    plant.wire(Harness(("battery",), ("supply",), crossed=True))
    plant.command_supply("supply", 9.0, 1.0, True)
    on(plant, 5.0)
    assert plant.voltage("exposed_voltage") == -5.0
    assert plant.voltage("guarded_voltage") == 9.0
    assert plant.supply_terminals("battery") == (5.0, 0.0, False)


def test_lead_and_bleeder_of_the_stand_in_can_fail(make: Make) -> None:
    plant = make("pmos-sensed", wiring=("battery-lead-resistance=1", "battery-bleeder-missing"))
    on(plant, 6.0, load=2.0)
    volts, amps, _ = plant.supply_terminals("battery")
    assert 2.0 < amps < 2.1  # and what the supply that is off takes through the stage
    at_port = plant.load_terminals()[0]
    assert volts - at_port == pytest.approx((1 + LEAD_OHM) * amps, rel=1e-6)
    plant.command_load("CURR", 0.0, False)
    plant.command_supply("supply", VOLTS, 5.0, True)
    plant.command_supply("battery", 6.0, 5.0, False)
    plant.elapse(1)
    assert plant.supply_terminals("battery")[0] == pytest.approx(VOLTS, abs=0.1)
    assert abs(plant.supply_terminals("battery")[1]) < 1e-6
    plant = make("pmos-sensed", wiring=("battery-lead-off",))
    plant.command_supply("supply", VOLTS, 5.0, True)
    kick(plant)
    assert plant.harness == SENSED  # says who wired it
    assert abs(plant.voltage("gate_voltage")) < 0.5
    assert plant.supply_terminals("battery")[1] == 0


def test_the_second_supply_speaks_for_the_stand_in() -> None:
    bench = Bench(bench_file(WITH_BATTERY))
    bench.tell("battery", ":SOUR:VOLT 6;:SOUR:CURR 0.5;:OUTP ON")
    assert bench.world.battery[2]
    assert bench.world.battery[0] == pytest.approx(6, abs=0.01)
    assert not bench.world.supply[2]
    assert float(bench.ask("battery", ":MEAS:VOLT?")) == pytest.approx(6, abs=0.02)
    assert float(bench.ask("supply", ":MEAS:VOLT?")) == pytest.approx(0, abs=0.02)
    bench.tell("control", ':SIM:FAUL "stuck-output:battery",0')
    bench.tell("battery", ":OUTP OFF")
    bench.tell("supply", ":OUTP ON;:OUTP OFF")
    assert [bench.world.battery[2], bench.world.supply[2]] == [True, False]
