"""The plant with the supply's leads crossed, for stages in the plus lead and in the minus lead."""

from __future__ import annotations

from functools import partial
from pathlib import Path

import pytest

from benchkit.harness import DRAWING, REVERSED, Harness
from instruments.simulated.terminals import BLEED_S
from tests.instruments.simulated_stage import LIMIT, VOLTS, Make, crossed, energise, plant_with

PASS = ("pmos-pass", "nmos-pass", "pmos-pass-zener", "nmos-pass-zener")


@pytest.fixture
def make(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path)


@pytest.mark.parametrize("kind", ["pass", "pass-zener"])
@pytest.mark.parametrize("fault", [None, "gate-open", "dry-joint=0.05", "rds-on-scale=1.5"])
@pytest.mark.parametrize("wiring", [DRAWING, REVERSED])
def test_a_stage_in_the_minus_lead_is_the_mirror_of_one_in_the_plus_lead(
    make: Make, kind: str, fault: str | None, wiring: Harness
) -> None:
    seen = []
    for channel in "pn":
        plant = make(f"{channel}mos-{kind}", *([fault] if fault else []))
        plant.wire(wiring)
        energise(plant, limit=5.0, load=2.0)
        names = ("drop", "exposed_voltage", "exposed_current", "guarded_voltage")
        seen.append([plant.voltage(name) for name in names])
        seen[-1] += plant.supply_terminals("supply")[:2]
        seen[-1] += [plant.truth("loss"), abs(plant.truth("gate_voltage"))]
    assert seen[0] == pytest.approx(seen[1], rel=1e-6, abs=1e-9)
    assert abs(seen[0][0]) > 0.02


@pytest.mark.parametrize("topology", PASS)
def test_a_crossed_supply_sees_its_own_volts_and_the_port_the_reverse(
    make: Make, topology: str
) -> None:
    plant = crossed(make(topology), load=2.0)
    volts, amps, limits = plant.supply_terminals("supply")
    assert volts == pytest.approx(VOLTS, abs=1e-3)
    assert not limits
    assert plant.voltage("exposed_voltage") == pytest.approx(-VOLTS, abs=1e-3)
    assert plant.voltage("guarded_voltage") == pytest.approx(0, abs=0.05)
    assert plant.voltage("drop") == pytest.approx(-VOLTS, abs=0.05)
    current = plant.truth("exposed_current")
    assert -50e-6 < current < 0
    assert amps == pytest.approx(-current)
    assert plant.load_terminals()[1] == pytest.approx(BLEED_S * plant.truth("guarded_voltage"))


@pytest.mark.parametrize("topology", PASS)
def test_the_gate_is_driven_right_way_round_only(make: Make, topology: str) -> None:
    most = 10.6 if topology.endswith("zener") else VOLTS
    sign = -1 if topology.startswith("p") else 1
    plant = make(topology)
    energise(plant, load=0.5)
    assert 9 < sign * plant.truth("gate_voltage") <= most
    plant = crossed(make(topology))
    assert sign * plant.truth("gate_voltage") <= 0.05
    plant = make(topology, "gate-open")
    energise(plant, load=0.5)
    assert plant.truth("gate_voltage") == pytest.approx(0, abs=1e-3)
    assert 0.5 < plant.voltage("drop") < 0.9  # its body diode


def test_a_series_diode_leaks_into_what_is_on_the_guarded_side(make: Make) -> None:
    """The sheet says 20 uA typically, 200 uA at most, at 40 V: less at 12 V, and more of it than
    any switch here. It flows through the load's bleed, which pulls the guarded side negative."""
    plant = crossed(make("series-diode"))
    current, guarded = plant.truth("exposed_current"), plant.voltage("guarded_voltage")
    assert -200e-6 < current < -1e-6
    assert guarded == pytest.approx(current / BLEED_S, rel=1e-4)
    assert -VOLTS < guarded < -0.05


@pytest.mark.parametrize("topology", ["series-diode", *PASS])
def test_a_short_lets_the_reverse_through(make: Make, topology: str) -> None:
    plant = crossed(make(topology, "short"))
    assert plant.voltage("guarded_voltage") == pytest.approx(-VOLTS, abs=1e-3)
    assert not plant.supply_terminals("supply")[2]  # nothing on the guarded side takes it
    plant = crossed(make(topology, "short", wiring=("load-conducts-back",)))
    volts, amps, limits = plant.supply_terminals("supply")
    assert limits
    assert amps == pytest.approx(LIMIT, rel=1e-3)
    assert plant.truth("exposed_current") == pytest.approx(-LIMIT, rel=1e-3)
    assert -1 < plant.voltage("guarded_voltage") < -0.5
    assert 0.5 < volts < 1
    assert plant.truth("drop") == pytest.approx(-LIMIT * 4e-3, rel=1e-2)


@pytest.mark.parametrize("topology", ["pmos-pass", "nmos-pass", "series-diode"])
def test_a_board_that_works_keeps_its_supply_out_of_its_limit_whatever_the_load(
    make: Make, topology: str
) -> None:
    plant = crossed(make(topology, wiring=("load-conducts-back",)))
    assert not plant.supply_terminals("supply")[2]
    assert plant.voltage("guarded_voltage") > -0.6


def test_a_clamp_takes_all_that_a_crossed_supply_can_give(make: Make) -> None:
    plant = crossed(make("clamp"))
    _, amps, limits = plant.supply_terminals("supply")
    assert limits
    assert amps == pytest.approx(LIMIT, rel=1e-3)
    assert plant.truth("exposed_current") == pytest.approx(-LIMIT, rel=1e-3)
    assert -1.1 < plant.voltage("guarded_voltage") < -0.6  # its forward drop
    warm = plant.truth("loss")
    assert warm == pytest.approx(LIMIT * -plant.truth("guarded_voltage"), rel=1e-3)
    assert plant.truth("case_K") > 0


@pytest.mark.parametrize("topology", ["series-diode", *PASS])
def test_an_open_part_lets_nothing_through_either_way(make: Make, topology: str) -> None:
    plant = make(topology, "open")
    energise(plant, load=1.0)
    assert plant.voltage("drop") == pytest.approx(VOLTS, abs=0.01)
    plant = crossed(make(topology, "open"))
    assert abs(plant.truth("exposed_current")) < 1e-6


@pytest.mark.parametrize("topology", ["series-diode", *PASS])
def test_a_dry_joint_adds_to_the_drop_and_does_not_warm_the_part(make: Make, topology: str) -> None:
    drops, losses = [], []
    for faults in ((), ("dry-joint=0.05",)):
        plant = make(topology, *faults)
        energise(plant, limit=5.0, load=2.0)
        drops.append(plant.truth("drop"))
        losses.append(plant.truth("loss"))
    assert drops[1] - drops[0] == pytest.approx(0.1, rel=0.01)
    assert losses[1] == pytest.approx(losses[0], rel=0.01)


@pytest.mark.parametrize("topology", ["series-diode", *PASS])
def test_a_leak_shows_only_the_wrong_way_round(make: Make, topology: str) -> None:
    good, leaky = make(topology), make(topology, "leaky=20000")
    for plant in (good, leaky):
        energise(plant, limit=5.0, load=2.0)
    assert leaky.truth("drop") == pytest.approx(good.truth("drop"), rel=1e-4)
    plant = crossed(make(topology, "leaky=20000"))
    if topology.endswith("zener"):  # which draws through the gate resistor, forwards
        assert -4 < plant.voltage("guarded_voltage") < -1
        return
    whole = 20000 + 1 / BLEED_S
    assert plant.voltage("guarded_voltage") == pytest.approx(-VOLTS * (1 - 20000 / whole), rel=0.01)
    assert plant.truth("exposed_current") == pytest.approx(-VOLTS / whole, rel=0.1)


@pytest.mark.parametrize("topology", PASS)
def test_a_mosfet_fitted_the_wrong_way_round_passes_the_reverse(make: Make, topology: str) -> None:
    """Its body diode then points at the source, while the channel conducts as it should: only the
    reverse tells."""
    plant = make(topology, "wrong-way-round")
    energise(plant, limit=5.0, load=2.0)
    good = make(topology)
    energise(good, limit=5.0, load=2.0)
    assert plant.truth("drop") == pytest.approx(good.truth("drop"), rel=0.1)
    plant = crossed(make(topology, "wrong-way-round"))
    assert -VOLTS < plant.voltage("guarded_voltage") < -VOLTS + 1


def test_a_diode_fitted_the_wrong_way_round_passes_the_reverse_only(make: Make) -> None:
    plant = make("series-diode", "wrong-way-round")
    energise(plant, load=1.0)
    assert plant.voltage("guarded_voltage") < 0.1
    plant = crossed(make("series-diode", "wrong-way-round"))
    assert -VOLTS < plant.voltage("guarded_voltage") < -VOLTS + 0.5


@pytest.mark.parametrize("topology", ["series-diode", *PASS])
@pytest.mark.parametrize("wiring", [DRAWING, REVERSED])
@pytest.mark.parametrize("fault", [None, "short", "leaky=500", "wrong-way-round"])
def test_what_goes_in_at_the_terminals_is_what_comes_out_and_what_warms(
    make: Make, topology: str, wiring: Harness, fault: str | None
) -> None:
    """Beside the main part only the gate resistor and the Zener take anything, some milliwatts;
    on the way from the supply the lead and the shunt do."""
    plant = make(topology, *([fault] if fault else []), wiring=("load-conducts-back",))
    plant.wire(wiring)
    energise(plant, limit=5.0, load=2.0)
    into = plant.voltage("exposed_voltage") * plant.truth("exposed_current")
    volts, amps, _ = plant.supply_terminals("supply")
    lead = 0.018 + plant.voltage("exposed_current") / plant.truth("exposed_current")
    assert volts * amps == pytest.approx(into + lead * amps**2, rel=1e-6, abs=1e-9)
    load_volts, load_amps = plant.load_terminals()
    left = into - load_volts * load_amps - plant.truth("loss")
    assert -1e-7 < left < (2e-2 if "zener" in topology else 1e-6)
