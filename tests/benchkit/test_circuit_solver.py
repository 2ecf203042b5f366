"""The solver against closed forms, an independent solver, and random networks."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import lambertw

from benchkit.circuit import (
    GROUND,
    Channel,
    CurrentLoad,
    Emf,
    Junction,
    LimitedSource,
    Network,
    Resistor,
    Solution,
    network,
    solve,
)
from benchkit.circuit.network import Branch, Element, terminal_currents
from benchkit.circuit.solver import CHUNK, TOLERANCE
from benchkit.parts.diode import DiodeLaw, thermal_voltage
from benchkit.parts.mosfet import ChannelLaw, MosfetLaws
from benchkit.topologies.base import EXPOSED, GUARDED
from tests.benchkit.example_stages import PMOS, SCHOTTKY, build

Floats = NDArray[np.float64]

CHANNEL = ChannelLaw(20.0, 1.8, 0.0)
PLAIN_DIODE = DiodeLaw(1e-6, 1.05, 0.05, 0.69, 2.0)
AT_C = 0.026977208077140147 / 1.05 / 8.617333262e-5 - 273.15
"""Where n k T / q is what pvlib was asked with."""


def test_resistive_divider() -> None:
    ohms = np.array([1.0, 2.0, 1e6])
    circuit = network(
        [Resistor("R1", ("in", "mid"), ohms), Resistor("R2", ("mid", GROUND), 3.0)],
        held={"in": 12.0},
    )
    solution = solve(circuit, 3)
    assert solution.settled.all()
    assert solution.volts["mid"] == pytest.approx(12 * 3 / (3 + ohms), rel=1e-9)
    assert solution.currents["R1"] == pytest.approx(12 / (3 + ohms), rel=1e-9)


def test_junction_with_resistance_against_lambert_w() -> None:
    """Banwell and Jayakumar 2000: I = (nVt/R) W((Is R/nVt) exp((V + Is R)/nVt)) - Is."""
    volts = np.array([-1.0, 0.0, 0.1, 0.3, 0.5, 1.0])
    ohms, scale = 0.05, float(1.05 * thermal_voltage(40.0))
    law = replace(PLAIN_DIODE, series_ohm=1e-6)
    saturation = float(np.exp(law.log_saturation(40.0)))
    circuit = network(
        [Junction("D1", ("in", "mid"), law.at(40.0)), Resistor("R1", ("mid", GROUND), ohms)],
        held={"in": volts},
    )
    whole = ohms + 1e-6
    argument = saturation * whole / scale * np.exp((volts + saturation * whole) / scale)
    expected = [scale / whole * lambertw(complex(a)).real - saturation for a in argument]
    solution = solve(circuit, volts.size)
    assert solution.settled.all()
    assert solution.currents["D1"] == pytest.approx(expected, rel=1e-7, abs=1e-15)


def test_series_diode_against_pvlib() -> None:
    """pvlib (BSD-3), single-diode solver by Lambert W, dark; values recorded and computed."""
    from pvlib.pvsystem import i_from_v, v_from_i

    recorded = {0.3: 0.060388655502185286, 0.5: 2.136353497081449}
    law = replace(PLAIN_DIODE, saturation_A=1e-6)
    law = replace(law, bandgap_V=0.0, exponent=0.0)  # the same Is at any temperature
    volts = np.array([0.3, 0.5, 0.1, 0.4, 0.8])
    circuit = network([Junction("D1", ("in", GROUND), law.at(AT_C))], held={"in": volts})
    amps = solve(circuit, volts.size).currents["D1"]
    assert amps[:2] == pytest.approx(list(recorded.values()), rel=1e-9)
    common = {
        "photocurrent": 0.0, "saturation_current": 1e-6, "resistance_series": 0.05,
        "resistance_shunt": np.inf, "nNsVth": 0.026977208077140147, "method": "lambertw",
    }  # fmt: skip
    assert amps == pytest.approx(-i_from_v(volts, **common), rel=1e-9)
    driven = network([
        CurrentLoad("I1", ("top", GROUND), -1.0), Junction("D1", ("top", GROUND), law.at(AT_C)),
    ])  # fmt: skip
    drop = solve(driven, 1).volts["top"]
    assert drop == pytest.approx([0.4227039299913234], rel=1e-9)
    assert drop == pytest.approx([v_from_i(-1.0, **common)], rel=1e-9)


def test_power_balances() -> None:
    """What the held node delivers is what the elements burn (Tellegen's theorem)."""
    stage = build(PMOS)
    sample = stage.draw(50, 1)
    load = CurrentLoad("load", (GUARDED, GROUND), np.linspace(0.01, 5, 50))
    circuit = network([*stage.elements(sample, 70.0), load], held={EXPOSED: 12.0})
    solution = solve(circuit, 50)
    burnt, delivered = np.zeros(50), np.zeros(50)
    for element in circuit.elements:
        for node, amps in zip(
            element.nodes, terminal_currents(element, solution.volts), strict=True
        ):
            burnt += solution.volts[node] * amps
            delivered += 12.0 * amps * (node == EXPOSED)
    assert solution.settled.all()
    assert burnt == pytest.approx(delivered, rel=1e-8)


@pytest.mark.parametrize(("ohms", "share"), [(10.0, 1e-3), (1e-7, 1.0)])
def test_a_node_that_everything_left_has_a_voltage(ohms: float, share: float) -> None:
    """Only the shunt is left to hold it. Behind 1e-7 ohm double precision does not see the shunt:
    the Jacobian is singular in it, and any voltage is as good."""
    circuit = network([
        Channel("Q1", ("d", "g", GROUND), ChannelLaw(20.0, 3.0, 0.0).at(25.0), +1),
        Resistor("R1", ("g", GROUND), 100.0), Resistor("R2", ("d", "e"), ohms),
    ])  # fmt: skip
    solution = solve(circuit, 1, start={"d": 5.0, "e": 5.0})
    assert solution.settled.all()
    assert abs(solution.volts["e"][0]) <= 5.0 * share


@dataclass(frozen=True)
class _NoWayOut:
    """A current that is never zero: there is no operating point."""

    name: str = "X1"
    nodes: tuple[str, str] = ("a", GROUND)

    def branches(self, volts: Floats) -> list[Branch]:
        across = volts[0] - volts[1]
        root = np.sqrt(1e4 + across**2)
        return [Branch(0, 1, root, ((0, 1, across / root),))]


def test_what_cannot_be_solved_is_said() -> None:
    solution = solve(network([_NoWayOut()]), 2)
    assert not solution.settled.any()
    assert np.all(solution.residual > 0.1)


def test_saturated_supply_against_a_load_falls_to_where_the_load_gives_way() -> None:
    """2 A of limit against a load of 3 A, from the state of an unloaded output."""
    circuit = network([
        LimitedSource("V1", ("out", GROUND), 30.0, 2.0), _Fading("L1", ("out", GROUND), 3.0),
        Resistor("bleeder", ("out", GROUND), 2e5),
    ])  # fmt: skip
    solution = solve(circuit, 1, start={"out": 30.0})
    assert solution.settled.all()
    assert solution.volts["out"] == pytest.approx([0.05 * np.arctanh(2 / 3)], rel=1e-4)


def test_an_entry_does_not_depend_on_its_neighbours() -> None:
    """Hard entries are followed on while easy ones are kept as they were."""
    limits = np.array([0.05, 2.0, 9.0])
    alone = [_bench(float(limit), 1).volts[GUARDED][0] for limit in limits]
    assert _bench(limits, 3).volts[GUARDED] == pytest.approx(alone, rel=1e-9, abs=1e-9)


def _bench(limit_A: Floats | float, batch: int, amps: Floats | float = 3.0) -> Solution:
    return solve(network([
        LimitedSource("V1", (EXPOSED, GROUND), 12.0, limit_A),
        Junction("D1", (EXPOSED, GUARDED), PLAIN_DIODE.at(25.0)),
        _Fading("L1", (GUARDED, GROUND), amps),
    ]), max(batch, np.size(amps)), start={EXPOSED: 12.0, GUARDED: 12.0})  # fmt: skip


@dataclass(frozen=True)
class _Fading:
    """A constant current that fades away with the voltage, as an electronic load's does."""

    name: str
    nodes: tuple[str, str]
    amps: Floats | float

    def branches(self, volts: Floats) -> list[Branch]:
        share = np.tanh((volts[0] - volts[1]) / 0.05)
        return [Branch(0, 1, self.amps * share, ((0, 1, self.amps * (1 - share**2) / 0.05),))]


def _random_bench(draw: np.random.Generator) -> tuple[Network, dict[str, float] | None]:
    """A bench supply that may be in its limit, a lead, a stage with a fault, and a load."""
    stage = STAGES[draw.integers(len(STAGES))]
    sample = stage.draw(1, int(draw.integers(10**6))).repeated(2)
    hot = draw.uniform(-20, 250)
    emf = float(draw.choice([0.0, 0.3, 1.0, 12.0, 30.0, draw.uniform(0, 30)]))
    limit = float(draw.choice([0.05, 9.0, draw.uniform(0.05, 9)]))
    amps = float(draw.choice([0.0, 1e-6, 0.01, limit, draw.uniform(0, 10)]))
    fault = draw.choice(["none", "dry", "short", "open", "gate-open"])
    laws = dict(sample.laws)
    if fault == "gate-open":
        for name, law in laws.items():
            if isinstance(law, MosfetLaws):
                weak = replace(law.channel, gain_A_per_V2=law.channel.gain_A_per_V2 * 1e-12)
                laws[name] = MosfetLaws(weak, law.body)
        sample = replace(sample, laws=laws)
    inside: list[Element] = stage.elements(sample, hot)
    if fault == "open":
        inside = [Resistor("fault", (EXPOSED, GUARDED), 1e8)]
    if fault == "short":
        inside.append(Resistor("fault", (EXPOSED, GUARDED), 4e-3))
    loads: list[Element] = [
        _Fading("load", (GUARDED, GROUND), np.array([amps, 1.001 * amps + 1e-6])),
        Resistor("load", (GUARDED, GROUND), 10 ** draw.uniform(-2, 4)),
        LimitedSource("load", (GROUND, GUARDED), -draw.uniform(0, 30), 20.0, 0.05),
    ]
    circuit = network([
        LimitedSource("supply", ("supply+", GROUND), emf, limit),
        Resistor("lead", ("supply+", EXPOSED), 0.5 if fault == "dry" else 0.03),
        *inside, loads[draw.choice(3, p=[0.6, 0.2, 0.2])],
        Resistor("bleeder", (GUARDED, GROUND), 2e5),
    ])  # fmt: skip
    names = ("supply+", EXPOSED, GUARDED)
    kind = draw.integers(3)
    if kind == 0:
        return circuit, None
    if kind == 1:
        return circuit, dict.fromkeys(names, emf)
    return circuit, {name: float(draw.uniform(-1, 30)) for name in names}


STAGES = [build(PMOS), build(SCHOTTKY)]


@pytest.mark.parametrize("seed", range(4))
def test_random_benches_settle(seed: int) -> None:
    draw = np.random.default_rng(seed)
    for number in range(20):
        circuit, start = _random_bench(draw)
        with np.errstate(divide="raise", over="raise", invalid="raise"):
            solution = solve(circuit, 2, start=start)
        assert solution.settled.all(), (seed, number, solution.residual, circuit)
        assert np.all(solution.residual <= TOLERANCE)
        # The bound is far below what a search in the dark would take.
        assert solution.iterations < 200, (seed, number)


def test_the_common_case_needs_few_iterations() -> None:
    """Smooth laws, right way round: plain Newton steps, the same few for a whole batch."""
    stage = build(PMOS)
    load = CurrentLoad("load", (GUARDED, GROUND), np.geomspace(0.01, 5, 400))
    circuit = network([*stage.elements(stage.draw(400, 3), 40.0), load], held={EXPOSED: 12.0})
    solution = solve(circuit, 400, start={GUARDED: 11.5})
    assert solution.settled.all()
    assert solution.iterations <= 9


def test_chunks_do_not_show() -> None:
    """More entries than one chunk holds, the hard ones gathered from all: each as if alone."""
    amps = np.geomspace(1e-6, 5, CHUNK + 37)
    whole = _bench(2.0, 1, amps)
    assert whole.settled.all()
    for entry in (0, CHUNK - 1, CHUNK, CHUNK + 36):
        alone = _bench(2.0, 1, amps[[entry]])
        assert whole.volts[GUARDED][entry] == pytest.approx(alone.volts[GUARDED][0], rel=1e-9)


def test_a_circuit_that_swings_has_its_operating_point_found() -> None:
    """Three inverting stages in a ring, each a channel on a resistor: it oscillates, so that no
    transient settles. By symmetry all gates are at the voltage where one stage balances."""
    law = replace(CHANNEL, gain_A_per_V2=0.5).at(25.0)
    ring: list[Element] = [Emf("supply", ("rail", GROUND), 12.0, 0.1)]
    for own, after in (("a", "b"), ("b", "c"), ("c", "a")):
        ring += [
            Resistor(f"R{after}", ("rail", after), 1e3),
            Channel(f"Q{after}", (after, own, GROUND), law, 1),
        ]  # fmt: skip
    start = {"rail": 12.0, "a": 2.0, "b": 9.0, "c": 0.5}
    solution = solve(network(ring), 1, start, follow=True)
    assert solution.settled.all()
    gate = solution.volts["a"]
    assert [solution.volts[n][0] for n in "bc"] == pytest.approx([gate[0], gate[0]], rel=1e-9)
    amps, _, _ = law.current(gate, gate)
    assert amps == pytest.approx((solution.volts["rail"] - gate) / 1e3, rel=1e-8)


def test_two_elements_of_one_name_are_refused() -> None:
    with pytest.raises(ValueError, match="two elements are called R1"):
        network([Resistor("R1", ("a", "b"), 1.0), Resistor("R1", ("b", GROUND), 1.0)])
