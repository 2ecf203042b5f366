"""Properties that any circuit has, whatever its parts: energy, symmetry, order, closed forms."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.special import lambertw

from benchkit.circuit import Emf, Resistor
from benchkit.circuit.network import terminal_currents
from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.parts.diode import DiodeLaw, thermal_voltage
from benchkit.parts.resistor import ResistorLaw
from benchkit.prediction.connections import SCENARIOS, Connection, surroundings
from benchkit.prediction.forward import forward
from benchkit.prediction.operating_point import OperatingPoint, connected, reached
from benchkit.prediction.scenarios import conditions, scenario
from benchkit.stage import Sample, Stage, build_stage
from tests.benchkit.nine_stages import STAGES, made, text

Floats = NDArray[np.float64]

SHUNT_S = 1e-12
"""The conductance that every node has to ground (``benchkit.circuit.equations``)."""
PAIRS = [("pmos-pass", "nmos-pass"), ("pmos-pass-zener", "nmos-pass-zener"),
         ("pmos-sensed", "nmos-sensed")]  # fmt: skip

few = settings(max_examples=6, deadline=None, derandomize=True, database=None)
stages = {name: made(name) for name in STAGES}


@cache
def ended(topology: str, name: str) -> OperatingPoint:
    """Two boards at every voltage that drives it."""
    of = stages[topology]
    around = surroundings(of.file)
    at = conditions(of, around, name, 2)
    drawn = of.draw(2, 3).repeated(at.volts.size // 2)
    return reached(of, drawn, connected(of, around, name, at), 50.0, 50.0)


# Energy


@pytest.mark.parametrize("topology", STAGES)
@pytest.mark.parametrize("name", SCENARIOS)
def test_what_sources_deliver_the_parts_burn(topology: str, name: str) -> None:
    """Tellegen's theorem; the shunt at every node burns its V^2 times 1e-12 S too. 2e-12 W are the
    last bits of 15 V across the milliohms of a source."""
    of = stages[topology]
    point = ended(topology, name)
    volts, outside = point.solution.volts, (*point.connection.exposed, *point.connection.guarded)
    given_W, turned_over = np.zeros(point.exposed_V.shape), np.zeros(point.exposed_V.shape)
    for element in outside:
        for node, amps in zip(element.nodes, terminal_currents(element, volts), strict=True):
            given_W = given_W - volts[node] * amps
            turned_over = turned_over + np.abs(volts[node] * amps)
    burnt = SHUNT_S * np.sum([np.square(v) for v in volts.values()], axis=0)
    burnt = burnt + np.sum([point.part(ref).power_W for ref in of.wiring.parts], axis=0)
    assert np.abs(given_W - burnt).max() <= 1e-8 * turned_over.max() + 2e-12


@pytest.mark.parametrize("topology", STAGES)
@pytest.mark.parametrize("name", SCENARIOS)
def test_no_part_gives_power(topology: str, name: str) -> None:
    point = ended(topology, name)
    assert all(
        point.part(reference).power_W.min() >= -1e-12 * point.part(reference).power_W.max() - 1e-14
        for reference in stages[topology].wiring.parts
    )


# Symmetry


@pytest.mark.parametrize(("p_channel", "n_channel"), PAIRS)
@pytest.mark.parametrize("name", SCENARIOS)
def test_the_n_channel_mirror_does_the_same(p_channel: str, n_channel: str, name: str) -> None:
    """Every voltage and current turned round: the terminals see no difference."""
    one, other = ended(p_channel, name), ended(n_channel, name)
    assert other.exposed_V == pytest.approx(one.exposed_V, rel=1e-6, abs=1e-9)
    assert other.guarded_V == pytest.approx(one.guarded_V, rel=1e-6, abs=1e-9)
    assert other.exposed_A == pytest.approx(one.exposed_A, rel=1e-5, abs=1e-10)
    for reference in stages[p_channel].wiring.parts:
        first, second = one.part(reference), other.part(reference)
        kind = stages[p_channel].file.parts[reference].kind
        sign = 1.0 if kind in ("diode", "zener") else -1.0
        assert second.voltage_V == pytest.approx(sign * first.voltage_V, rel=1e-5, abs=1e-9)
        assert second.power_W == pytest.approx(first.power_W, rel=1e-5, abs=1e-10)


@pytest.mark.parametrize("name", ["reversed-battery-on", "right-way"])
def test_ratings_and_sentences_of_the_mirror_are_the_same(name: str) -> None:
    one, other = (
        scenario(of, of.draw(6, 3), name, surroundings(of.file))
        for of in (stages["pmos-sensed"], stages["nmos-sensed"])
    )
    assert other.notes == one.notes
    for first, second in zip(one.ratings, other.ratings, strict=True):
        assert (first.part, first.rating, first.limit) == (
            second.part, second.rating, second.limit
        )  # fmt: skip
        assert second.value == pytest.approx(first.value, rel=1e-5, abs=1e-9)


def one_diode(anode: str, cathode: str) -> Stage:
    """A diode and a lead between the plus terminals, either way."""
    body = text("series-diode", stage='guards = "load"\nmain = "D1"',
                W1='kind = "lead"\nvalue_ohm = 0.1\n').replace(
        'topology = "series-diode"', 'topology = "network"'
    )  # fmt: skip
    wired = (
        f'[[network]]\npart = "D1"\nanode = "{anode}"\ncathode = "middle"\n'
        f'[[network]]\npart = "W1"\nfirst = "middle"\nsecond = "{cathode}"\n[heat]'
    )
    return build_stage(parse(StageFile, body.replace("[heat]", wired), "stage.toml"), "stage.toml")


@few
@given(volts=st.floats(-20.0, 20.0), ohms=st.floats(0.5, 500.0))
def test_turned_end_for_end_the_ports_change_places(volts: float, ohms: float) -> None:
    found = []
    for of, turned in (
        (one_diode("exposed+", "guarded+"), False), (one_diode("guarded+", "exposed+"), True)
    ):  # fmt: skip
        ports = of.ports
        exposed = ports.exposed_plus, ports.exposed_minus
        guarded = ports.guarded_plus, ports.guarded_minus
        fed, drawn = (guarded, exposed) if turned else (exposed, guarded)
        source, load = (Emf("source", fed, volts, 0.05),), (Resistor("load", drawn, ohms),)
        both = (load, source) if turned else (source, load)
        point = reached(of, of.draw(5, 1), [Connection(*both)], 40.0, 40.0)
        part = point.part("D1")
        ends = (point.guarded_V, point.exposed_V) if turned else (point.exposed_V, point.guarded_V)
        found.append(np.concatenate([*ends, part.voltage_V, part.current_A, part.power_W]))
    assert found[1] == pytest.approx(found[0], rel=1e-6, abs=1e-11)


# Order


@few
@given(
    amps=st.lists(st.floats(0.05, 3.0), min_size=2, max_size=6, unique=True),
    supply=st.floats(6.0, 15.0),
    junction=st.floats(-20.0, 120.0),
)
def test_the_drop_rises_with_the_current(amps: list[float], supply: float, junction: float) -> None:
    rising = np.array(sorted(amps))
    for topology, of in stages.items():
        drops = forward(of, of.typical(), rising, supply, junction).drop_V[0]
        if topology == "clamp":
            assert drops == pytest.approx(0.0, abs=1e-9)  # the lead runs straight through
        else:
            assert np.all(np.diff(drops) > 0), topology


@pytest.mark.parametrize("topology", ["pmos-sensed", "nmos-sensed"])
def test_a_sensed_stage_that_is_on_drops_next_to_nothing_at_a_milliampere(topology: str) -> None:
    of = stages[topology]
    drops = forward(of, of.typical(), np.array([1e-4, 5e-4, 1e-3]), 12.0, 25.0).drop_V[0]
    assert drops.max() < 1e-3


@few
@given(amps=st.floats(0.02, 3.0), supply=st.floats(5.0, 15.0), junction=st.floats(0.0, 110.0))
def test_corners_bound_what_is_drawn(amps: float, supply: float, junction: float) -> None:
    for topology, of in stages.items():
        least, most = (
            forward(of, of.corner(way), amps, supply, junction).drop_V[0, 0] for way in (-1, 1)
        )
        drawn = forward(of, of.draw(100, 9), amps, supply, junction).drop_V[:, 0]
        assert drawn.min() >= least - 1e-9, topology
        assert drawn.max() <= most + 1e-9, topology


@pytest.mark.parametrize("topology", ["series-diode", "pmos-pass", "nmos-sensed"])
def test_the_corner_is_hotter_than_any_board_that_is_drawn(topology: str) -> None:
    of = stages[topology]
    around = surroundings(of.file)
    hottest = [
        scenario(of, boards, "right-way", around).junction_C
        for boards in (of.typical(), of.draw(150, 5), of.corner(1))
    ]
    assert all(one is not None for one in hottest)
    assert hottest == sorted(hottest, key=lambda warm: warm or 0.0)
    assert hottest[0] != hottest[2]


# Closed forms


@few
@given(volts=st.floats(0.1, 14.0), ohms=st.floats(0.2, 1000.0), junction=st.floats(-40.0, 120.0))
def test_a_series_diode_is_lamberts_solution(volts: float, ohms: float, junction: float) -> None:
    """I = (n Vt/R) W((Is R/(n Vt)) exp((V + Is R)/(n Vt))) - Is, R all resistance of the loop
    (Banwell and Jayakumar, "Exact analytical solution for current flow through diode with series
    resistance", Electronics Letters 36, 2000)."""
    of = stages["series-diode"]
    boards = of.draw(4, 2)
    law = boards.laws["D1"]
    assert isinstance(law, DiodeLaw)
    saturation = np.exp(law.log_saturation(junction))
    scale = law.ideality * thermal_voltage(junction)
    loop = law.series_ohm + 0.05 + ohms
    z = np.log(saturation * loop / scale) + (volts + saturation * loop) / scale
    w = np.array([lambertw(np.exp(float(one))).real for one in z])
    expected = scale / loop * w - saturation
    ports = of.ports
    circuit = Connection(
        (Emf("source", (ports.exposed_plus, ports.exposed_minus), volts, 0.05),),
        (Resistor("load", (ports.guarded_plus, ports.guarded_minus), ohms),),
    )
    point = reached(of, boards, [circuit], junction, 25.0)
    assert point.exposed_A == pytest.approx(expected, rel=1e-6, abs=1e-9)
    assert point.guarded_V == pytest.approx(expected * ohms, rel=1e-6, abs=1e-9)


@few
@given(
    volts=st.floats(-30.0, 30.0), above=st.floats(0.1, 1e4), load=st.floats(0.1, 1e5),
    warm=st.floats(-40.0, 100.0),
)  # fmt: skip
def test_without_its_diode_it_is_a_divider(
    volts: float, above: float, load: float, warm: float
) -> None:
    """V R2/(R0 + R1 + R2), copper's resistance rising by 0.393 %/K from 20 C."""
    of = stages["series-diode"]
    whole = of.typical()
    copper = ResistorLaw(above * (1 + 5 * 3.93e-3), 3.93e-3 / (1 + 5 * 3.93e-3))
    boards = replace(whole, laws={"D1": copper})
    ports = of.ports
    circuit = Connection(
        (Emf("source", (ports.exposed_plus, ports.exposed_minus), volts, 0.05),),
        (Resistor("load", (ports.guarded_plus, ports.guarded_minus), load),),
    )
    point = reached(of, boards, [circuit], warm, warm)
    lead = above * (1 + 3.93e-3 * (warm - 20.0))
    assert point.guarded_V == pytest.approx(volts * load / (0.05 + lead + load), rel=1e-6, abs=1e-9)
    assert point.part("D1").power_W == pytest.approx(
        (volts / (0.05 + lead + load)) ** 2 * lead, rel=1e-6, abs=1e-12
    )


# Sampling


def test_a_seed_gives_the_same_scenario_again_and_another_does_not() -> None:
    of = made("pmos-sensed")
    around = surroundings(of.file)
    one, again, other = (
        scenario(of, of.draw(20, seed), "right-way", around).document() for seed in (5, 5, 6)
    )
    assert again == one
    assert other["junction_C"] != one["junction_C"]


@pytest.mark.parametrize("topology", STAGES)
def test_corners_among_the_drawn_take_the_last_two_places(topology: str) -> None:
    """The others are those that the same seed draws without them; two boards are both corners."""
    of = stages[topology]
    plain, with_corners = of.draw(9, 5), of.draw(9, 5, corners=True)
    both = of.draw(2, 5, corners=True)

    def drops(boards: Sample) -> Floats:
        return forward(of, boards, 2.0, 12.0, 40.0).drop_V[:, 0]

    ends = np.concatenate([drops(of.corner(way)) for way in (-1, 1)])
    assert drops(with_corners)[:-2] == pytest.approx(drops(plain)[:-2], rel=1e-9, abs=1e-12)
    for found in (drops(with_corners)[-2:], drops(both)):
        assert found == pytest.approx(ends, rel=1e-9, abs=1e-12)
    heat = with_corners.case_to_ambient_K_per_W
    assert heat[-1] == pytest.approx(45.0)
    assert heat[-1] == heat.max()


@pytest.mark.parametrize("topology", ["series-diode", "fused-clamp", "pmos-pass-zener"])
def test_more_samples_agree_within_the_error_of_sampling(topology: str) -> None:
    """Means of 300 and of 3000 boards differ by their standard errors, their spread by a few
    per cent; a share of either lies outside the 95 % band of the other."""
    of = stages[topology]
    few_V, many_V = (
        forward(of, of.draw(size, seed), 2.0, 12.0, 40.0).drop_V[:, 0]
        for size, seed in ((300, 1), (3000, 2))
    )
    spread = many_V.std()
    assert abs(few_V.mean() - many_V.mean()) < 4 * spread * np.sqrt(1 / 300 + 1 / 3000)
    assert few_V.std() == pytest.approx(spread, rel=4 / np.sqrt(2 * 300))
    low, high = np.percentile(many_V, (2.5, 97.5))
    outside = np.mean((few_V < low) | (few_V > high))
    assert abs(outside - 0.05) < 4 * np.sqrt(0.05 * 0.95 / 300)
