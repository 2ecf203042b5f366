"""Faults of a board by name, on each of the nine topologies: refused, or seen at the ports."""

from __future__ import annotations

from functools import partial
from pathlib import Path

import numpy as np
import pytest

from benchkit.harness import REVERSED, Harness
from instruments.simulated.board import BOARD_FAULTS
from instruments.simulated.board_faults import faulty_laws
from instruments.simulated.plant import Plant
from tests.benchkit.nine_stages import PARTS, STAGES, made
from tests.instruments.simulated_fake import WITH_BATTERY
from tests.instruments.simulated_stage import VOLTS, Make, kick, plant_with

SENSED = ("pmos-sensed", "nmos-sensed")
ZENERS = ("pmos-pass-zener", "nmos-pass-zener")
MOSFETS = ("pmos-pass", "nmos-pass", *ZENERS, *SENSED)
CLAMPS = ("clamp", "fused-clamp")
FUSE = {"F1": PARTS["fuse"]}
VALUES = {
    "rds-on-scale": "1.5", "drop-shift": "0.1", "dry-joint": "0.05", "leaky": "500",
    "heat-scale": "1.5", "fuse-too-large": "3",
}  # fmt: skip


@pytest.fixture
def make(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path, bench_has=(WITH_BATTERY,))


def used(plant: Plant, load: float = 2.0, volts: float = VOLTS) -> Plant:
    """As the stage is used: fed where its source belongs, a sensed one switched on."""
    plant.command_supply("supply", volts, 5.0, True)
    plant.elapse(1)
    if "battery" in plant.harness.exposed:
        kick(plant)
    plant.command_load("CURR", load, load > 0)
    plant.elapse(1)
    return plant


def reversed_alone(plant: Plant, limit: float = 1.0, bleeder_ohm: float | None = 1000.0) -> Plant:
    """The supply crossed at the exposed port, and a resistor across the guarded one."""
    plant.wire(Harness(("supply",), (), crossed=True, bleeder_ohm=bleeder_ohm))
    plant.command_supply("supply", VOLTS, limit, True)
    plant.elapse(1)
    return plant


def drop(plant: Plant) -> float:
    """Along the working current, whichever way it goes."""
    return float(np.sign(plant.truth("exposed_current")) * plant.truth("drop"))


@pytest.mark.parametrize("topology", STAGES)
@pytest.mark.parametrize("fault", BOARD_FAULTS)
def test_a_fault_is_given_or_refused(make: Make, topology: str, fault: str) -> None:
    role = fault.partition("-")[0]
    has = {
        "gate": topology in MOSFETS, "rds": topology in MOSFETS, "drop": topology not in MOSFETS,
        "fuse": topology == "fused-clamp", "zener": topology in ZENERS,
        "sense": topology in SENSED, "base": topology in SENSED, "hold": topology in SENSED,
    }  # fmt: skip
    spelled = f"{fault}={VALUES[fault]}" if fault in VALUES else fault
    if has.get(role, True):
        plant = used(make(topology, spelled))
        assert abs(plant.voltage("exposed_voltage")) < VOLTS + 0.01
        return
    with pytest.raises(ValueError, match=f"the fault '{fault}' cannot be given.*{topology}"):
        make(topology, spelled)


@pytest.mark.parametrize("spelled", ["dry-joint=0", "leaky=-1", "fuse-too-large=0"])
def test_a_value_that_cannot_be_is_refused(make: Make, spelled: str) -> None:
    with pytest.raises(ValueError, match="must be above 0"):
        make("fused-clamp", spelled)


@pytest.mark.parametrize("topology", STAGES)
def test_a_dry_joint_drops_its_own_voltage(make: Make, topology: str) -> None:
    good, bad = used(make(topology)), used(make(topology, "dry-joint=0.05"))
    current = abs(bad.truth("exposed_current"))
    assert current == pytest.approx(2.0, abs=0.15)
    assert drop(bad) - drop(good) == pytest.approx(0.05 * current, rel=0.01)
    assert bad.truth("loss") == pytest.approx(good.truth("loss"), rel=0.02, abs=1e-6)


@pytest.mark.parametrize("topology", MOSFETS)
@pytest.mark.parametrize("fault", ["gate-open", "gate-shorted"])
def test_a_gate_without_voltage_leaves_the_body_diode(
    make: Make, topology: str, fault: str
) -> None:
    """Which in a sensed stage points the other way, so that nothing comes through."""
    plant = used(make(topology, fault))
    assert abs(plant.voltage("gate_voltage")) < 1e-2
    if topology in SENSED:
        assert abs(plant.voltage("exposed_voltage")) < 0.1
    else:
        assert 0.6 < drop(plant) < 0.95


@pytest.mark.parametrize("topology", MOSFETS)
def test_the_meter_reads_the_gate_against_the_source(make: Make, topology: str) -> None:
    """Plus on the gate, minus on the source: negative for a P-channel that conducts."""
    plant = used(make(topology))
    held = 10.6 if topology in ZENERS else VOLTS
    sign = -1 if topology.startswith("p") else 1
    assert 9.2 < sign * plant.voltage("gate_voltage") <= held
    floats = plant.voltage("gate_voltage")
    plant.fault("lead-off:gate_voltage", 0.0, 1.0)
    assert plant.voltage("gate_voltage") != floats
    assert abs(plant.voltage("gate_voltage")) < 0.1


def test_a_part_without_a_gate_leaves_that_meter_floating(make: Make) -> None:
    assert abs(used(make("series-diode")).voltage("gate_voltage")) < 0.1


@pytest.mark.parametrize("topology", MOSFETS)
def test_a_wrong_mosfet_has_another_threshold(make: Make, topology: str) -> None:
    """With a threshold 8.5 V higher the channel has hardly any drive left."""
    good, wrong = used(make(topology)), used(make(topology, "wrong-part=8.5"))
    assert drop(wrong) > 1.5 * drop(good)
    near = used(make(topology, "wrong-part=0.01"))
    assert drop(near) == pytest.approx(drop(good), rel=0.01)


@pytest.mark.parametrize("power", [-1.0, 1.0])
@pytest.mark.parametrize("current_A", [0.1, 3.0])
@pytest.mark.parametrize("warm_C", [25.0, 100.0])
def test_a_wrong_diode_drops_half_or_double(power: float, current_A: float, warm_C: float) -> None:
    stage = made("series-diode")
    law = stage.typical().laws["D1"]
    wrong = faulty_laws(stage, {"D1": law}, {"wrong-part": power})["D1"]
    volts = law.forward_V(current_A, warm_C)  # type: ignore[union-attr]
    assert wrong.forward_V(current_A, warm_C) == pytest.approx(  # type: ignore[union-attr]
        2**power * volts, rel=1e-9
    )


@pytest.mark.parametrize("topology", ["series-diode", *CLAMPS])
def test_a_wrong_diode_is_seen_in_its_circuit(make: Make, topology: str) -> None:
    seen = []
    for faults in ((), ("wrong-part",)):
        plant = make(topology, *faults)
        if topology in CLAMPS:
            reversed_alone(plant, 4.0, None)
            seen.append(-plant.truth("guarded_voltage"))
        else:
            seen.append(drop(used(plant)))
    assert seen[1] == pytest.approx(2 * seen[0], rel=0.1)  # and it is warmer


@pytest.mark.parametrize("topology", CLAMPS)
def test_faults_of_a_clamp(make: Make, topology: str) -> None:
    """Right way round an open clamp is missed by nobody; reversed, the port follows the supply."""
    assert reversed_alone(make(topology)).voltage("guarded_voltage") > -1.1
    opened = reversed_alone(make(topology, "open"))
    assert opened.voltage("guarded_voltage") == pytest.approx(-VOLTS, abs=0.01)
    turned = make(topology, "wrong-way-round")
    assert 0.5 < used(turned, 1.0).voltage("guarded_voltage") < 1.1
    shorted = used(make(topology, "short"), 0.0)
    assert shorted.supply_terminals("supply")[2]
    assert shorted.voltage("guarded_voltage") < 0.03
    leaky = used(make(topology, "leaky=500"), 0.0)
    assert leaky.supply_terminals("supply")[1] == pytest.approx(VOLTS / 500, rel=0.02)


@pytest.mark.parametrize("topology", MOSFETS)
def test_faults_of_a_switch_in_reverse(make: Make, topology: str) -> None:
    """With the guarded port loaded by a kilo-ohm a good one holds it near nothing, a leak divides
    with it, and a short or a body diode that points the wrong way lets the reverse through."""
    good = reversed_alone(make(topology)).voltage("guarded_voltage")
    assert abs(good) < 0.5
    leaky = reversed_alone(make(topology, "leaky=500")).voltage("guarded_voltage")
    assert -VOLTS < leaky < good - 2
    for fault in ("short", "wrong-way-round"):
        plant = reversed_alone(make(topology, fault))
        assert plant.voltage("guarded_voltage") < -10.5
    if topology not in SENSED:
        opened = reversed_alone(make(topology, "open"))
        assert abs(opened.voltage("guarded_voltage")) < 0.1
    assert abs(drop(used(make(topology, "open")))) == pytest.approx(VOLTS, abs=0.3)


@pytest.mark.parametrize("topology", ["fused-clamp", "series-diode", "pmos-pass", "nmos-sensed"])
@pytest.mark.parametrize("fault", ["fuse-missing", "fuse-blown"])
def test_without_a_fuse_nothing_flows(make: Make, topology: str, fault: str) -> None:
    plant = used(make(topology, fault, parts=FUSE))
    assert abs(plant.truth("exposed_current")) < 1e-3
    assert abs(drop(plant)) == pytest.approx(VOLTS, abs=0.1)
    assert plant.truth("fuse_open") == 1


def test_a_bridged_fuse_lets_the_clamp_die(make: Make) -> None:
    """Five times the rated current: the fuse would have saved it. Of one too large the law gives
    the time: ten times the rating carries it for ever."""
    for fault, dead in (("fuse-bridged", 1.0), ("fuse-too-large=10", 1.0), ("heat-scale=1", 0.0)):
        plant = make("fused-clamp", fault)
        plant.wire(REVERSED)
        plant.command_supply("supply", VOLTS, 25.0, True)
        plant.elapse(5)
        assert plant.truth("part_dead") == dead
        assert plant.supply_terminals("supply")[2] == (dead == 1.0)
    plant = make("fused-clamp", "fuse-bridged")
    with pytest.raises(KeyError):
        plant.truth("fuse_open")


def test_a_larger_fuse_takes_as_much_longer(make: Make) -> None:
    """The same share of the opening current melts it in the same time, with the square of the
    current let through."""
    found = []
    for spelled, limit in (("heat-scale=0.01", 10.0), ("fuse-too-large=2", 20.0)):
        plant = make("fused-clamp", spelled)
        plant.wire(REVERSED)
        plant.command_supply("supply", VOLTS, limit, True)
        plant.elapse(60)
        assert plant.truth("fuse_open") == 1
        found.append((plant.truth("fuse_cleared_s"), plant.truth("fuse_A2s")))
    assert found[1][0] == pytest.approx(found[0][0], rel=1e-4)
    assert found[1][1] == pytest.approx(4 * found[0][1], rel=1e-4)


@pytest.mark.parametrize("topology", ZENERS)
def test_faults_of_the_gates_zener(make: Make, topology: str) -> None:
    sign = -1 if topology.startswith("p") else 1
    opened = used(make(topology, "zener-open"), volts=20.0)
    assert sign * opened.voltage("gate_voltage") == pytest.approx(20.0, abs=0.2)
    shorted = used(make(topology, "zener-short"), volts=20.0)
    assert abs(shorted.voltage("gate_voltage")) < 1e-2
    assert 0.6 < drop(shorted) < 0.95


@pytest.mark.parametrize("topology", SENSED)
def test_faults_of_the_sensing_parts(make: Make, topology: str) -> None:
    """Open ones leave the stage off for ever; a shorted transistor ties the gate, so that the
    stage is on without a battery, and stays on when one comes reversed."""
    for fault in ("sense-open", "base-open"):
        assert abs(used(make(topology, fault)).voltage("exposed_voltage")) < 0.1
    for faults, through in (((), False), (("sense-short",), True)):
        plant = make(topology, *faults)
        plant.wire(Harness(("load",), ("supply",)))
        plant.command_supply("supply", VOLTS, 1.0, True)
        plant.elapse(1)
        assert (plant.voltage("exposed_voltage") > 11) == through
        plant.command_supply("supply", VOLTS, 1.0, False)
        plant.elapse(1)
        plant.wire(Harness(("battery",), ("supply",), crossed=True))
        plant.command_supply("supply", VOLTS, 1.0, True)
        plant.command_supply("battery", VOLTS, 2.0, True)
        plant.elapse(1)
        assert (plant.truth("exposed_current") < -0.9) == through


@pytest.mark.parametrize("topology", SENSED)
def test_an_open_hold_resistor_leaves_the_gate_to_what_leaks(make: Make, topology: str) -> None:
    """The sensing transistor leaks little, so that the stage works all the same at rest: only a
    meter at the gate sees it. The charge of a gate that floats is not simulated."""
    gates = []
    for faults in ((), ("hold-open",)):
        plant = make(topology, *faults)
        plant.command_supply("supply", VOLTS, 5.0, True)
        plant.elapse(1)
        gates.append(abs(plant.voltage("gate_voltage")))
        assert abs(plant.voltage("exposed_voltage")) < 0.6
        assert abs(drop(used(plant, 0.0))) < 0.1
    assert gates[1] > 100 * gates[0]
    assert gates[1] < 0.5
