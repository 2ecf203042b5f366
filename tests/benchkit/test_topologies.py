"""The first two circuits, both ways round, against what the trade expects of them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.circuit import GROUND, CurrentLoad, Resistor, Solution, network, solve
from benchkit.files.stage import Working
from benchkit.parts.mosfet import MosfetLaws
from benchkit.prediction.forward import forward
from benchkit.stage import Sample, Stage
from benchkit.topologies import TOPOLOGIES
from benchkit.topologies.base import EXPOSED, GUARDED, TERMINALS
from tests.benchkit import nine_stages
from tests.benchkit.example_stages import PMOS, SCHOTTKY, build


def test_every_topology_can_be_named_in_a_stage_file() -> None:
    allowed = Working.model_fields["topology"].annotation
    named = set(allowed.__args__)  # type: ignore[union-attr]
    assert {*TOPOLOGIES, "network"} == named
    assert all(name == topology.name for name, topology in TOPOLOGIES.items())


@pytest.mark.parametrize("name", TOPOLOGIES)
def test_every_topology_is_a_whole_circuit(name: str) -> None:
    """Its roles have a node for each terminal, and each part alone can be placed."""
    topology = TOPOLOGIES[name]
    assert topology.roles[topology.main].absent == "required"
    for role in topology.roles.values():
        assert {len(TERMINALS[kind]) for kind in role.kinds} == {len(role.nodes)}
    stage = nine_stages.made(name)
    assert stage.main == stage.names[topology.main]
    assert set(stage.wiring.parts) == set(stage.file.parts)


@pytest.mark.parametrize("name", TOPOLOGIES)
def test_the_unbroken_lead_is_the_reference(name: str) -> None:
    """A P-channel breaks the plus lead, an N-channel the minus lead (common practice, no
    source); the other lead runs straight through."""
    ports = nine_stages.made(name).ports
    plus, minus = (ports.exposed_plus, ports.guarded_plus), (
        ports.exposed_minus, ports.guarded_minus)  # fmt: skip
    straight, broken = (plus, minus) if name.startswith("nmos") else (minus, plus)
    assert straight == (GROUND, GROUND)
    assert GROUND not in broken
    # A clamp without a lead resistance breaks neither.
    assert (broken[0] == broken[1]) is (name == "clamp")


def body_only(stage: Stage) -> Sample:
    """The stage before its channel has turned on."""
    typical = stage.typical()
    laws = typical.laws["Q1"]
    assert isinstance(laws, MosfetLaws)
    off = replace(laws.channel, gain_A_per_V2=np.full(1, 1e-12))
    return replace(typical, laws={**typical.laws, "Q1": MosfetLaws(off, laws.body)})


@pytest.mark.parametrize("amps", [0.1, 2.0, 5.0])
def test_body_diode_starts_the_pmos_and_drives_its_gate(amps: float) -> None:
    """Common practice, no source: at first the drop is the body diode's, 0.7 to 1.3 V, and what is
    left of the supply drives the gate; then the channel shorts the diode out."""
    stage = build(PMOS)
    first = forward(stage, body_only(stage), amps, 12.0, 25.0)
    assert 0.6 < first.drop_V[0, 0] < 1.3
    assert first.gate_V is not None
    assert first.gate_V[0, 0] == pytest.approx(-(12.0 - first.drop_V[0, 0]), rel=1e-9)
    then = forward(stage, stage.typical(), amps, 12.0, 25.0)
    assert then.drop_V[0, 0] < 0.12 * first.drop_V[0, 0] + 0.02
    assert then.gate_V is not None
    assert then.gate_V[0, 0] < first.gate_V[0, 0]


def test_60_milliohm_burn_a_quarter_of_a_watt_at_2_amperes() -> None:
    """Common practice, no source: 0.06 ohm at 2 A is 0.24 W."""
    stage = build(
        PMOS,
        ("typ_ohm = 0.030, max_ohm = 0.040", "typ_ohm = 0.090"),
        ("typ_ohm = 0.019, max_ohm = 0.025", "typ_ohm = 0.060"),
        ("typ_ohm = 0.028, junction", "typ_ohm = 0.090, junction"),
    )
    found = forward(stage, stage.typical(), 2.0, 10.1, 25.0)
    assert found.loss_W[0, 0] == pytest.approx(0.24, rel=0.01)


def test_small_schottky_burns_most_of_a_watt_at_2_amperes() -> None:
    """Common practice, no source: 0.42 V at 2 A is 0.84 W."""
    stage = build(SCHOTTKY, ("current_A = 3, typ_V = 0.45, max_V = 0.52",
                             "current_A = 2, typ_V = 0.42, max_V = 0.50"))  # fmt: skip
    found = forward(stage, stage.typical(), 2.0, 12.0, 25.0)
    assert found.loss_W[0, 0] == pytest.approx(0.84, rel=0.01)
    assert found.gate_V is None


def reversed_onto_a_resistor(stage: Stage, junction_C: float = 60.0) -> Solution:
    load = Resistor("load", (GUARDED, GROUND), 4.0)
    circuit = network([*stage.elements(stage.draw(200, 5), junction_C), load],
                      held={EXPOSED: -15.0})  # fmt: skip
    return solve(circuit, 200)


@pytest.mark.parametrize("text", [PMOS, SCHOTTKY])
def test_the_wrong_way_round_is_blocked(text: str) -> None:
    solution = reversed_onto_a_resistor(build(text))
    assert solution.settled.all()
    assert np.abs(solution.volts[GUARDED]).max() < 0.05


def test_a_held_guarded_side_keeps_the_pmos_on_when_reversed() -> None:
    """The gate is tied to the minus lead and the guarded side still holds the source up: the
    channel conducts the wrong way, as the trade knows (common practice, no source)."""
    stage = build(PMOS)
    elements = stage.elements(stage.typical(), 25.0)
    circuit = network([*elements, CurrentLoad("none", (EXPOSED, GROUND), 0.0)],
                      held={EXPOSED: -1.0, GUARDED: 12.0})  # fmt: skip
    assert solve(circuit, 1).currents["Q1.series"][0] < -50.0


def test_gate_resistor_of_the_file_is_used() -> None:
    """Without one the gate is tied to the minus lead itself."""
    resistor = (
        "[heat]",
        '[parts.R1]\nkind = "resistor"\nvalue_ohm = 10000\npower_max_W = 0.1\n[heat]',
    )
    with_one, without = build(PMOS, resistor), build(PMOS)
    assert with_one.gate_nodes == ("gate", GUARDED)
    placed = {e.name: e for e in with_one.elements(with_one.typical(), 25.0)}
    gate = placed["R1"]
    assert isinstance(gate, Resistor)
    assert gate.nodes == ("gate", GROUND)
    assert gate.ohms == pytest.approx(10000)
    assert without.gate_nodes == (GROUND, GUARDED)
    names = [e.name for e in without.elements(without.typical(), 25.0)]
    assert names == ["Q1", "Q1.series", "Q1.body"]
