"""Every stage in every scenario against ngspice, which nobody here wrote (version seen: 39).

Once on decks written by hand from the published formulas, once on those of ``netlist``. Node
voltages agree within 1 mV or 0.1 %, currents within 1 uA or 0.5 %.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from importlib.resources import files

import pytest

from benchkit.circuit import Emf, FuseLink
from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.prediction.connections import SCENARIOS
from benchkit.prediction.decks import scenario_deck, scenario_point
from benchkit.prediction.operating_point import OperatingPoint
from benchkit.stage import Stage, build_stage
from tests.benchkit.hand_decks import hand_deck
from tests.benchkit.nine_stages import STAGES, made
from tests.benchkit.spice import Found, operating_points
from tests.benchkit.test_circuit_ngspice import found_ngspice

pytestmark = pytest.mark.xdist_group("decks")  # they share their one run of ngspice
CELSIUS = (25.0, 100.0)
HAND_NODES = {
    "gate": "gate", "collector": "gate", "base": "base", "Q1.drain": "xq1.x", "Z1.knee": "xz1.i",
}  # fmt: skip


def same_volts(ours: float, theirs: float) -> bool:
    return abs(ours - theirs) <= max(1e-3, 1e-3 * abs(ours))


def same_amps(ours: float, theirs: float) -> bool:
    return abs(ours - theirs) <= max(1e-6, 5e-3 * abs(ours))


@cache
def stage_of(topology: str) -> Stage:
    return made(topology)


@pytest.fixture(scope="module")
def by_hand(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Found]:
    program = found_ngspice()
    decks = {}
    for topology in STAGES:
        stage = stage_of(topology)
        laws = {ref: (stage.file.parts[ref].kind, law) for ref, law in stage.typical().laws.items()}
        for name in SCENARIOS:
            for warm in CELSIUS:
                decks[f"{topology} {name} {warm:g}"] = hand_deck(
                    topology, name, stage.guards, warm, laws
                )
    return operating_points(program, tmp_path_factory.mktemp("hand"), decks)


@pytest.mark.parametrize("name", SCENARIOS)
@pytest.mark.parametrize("topology", STAGES)
def test_by_hand(by_hand: Mapping[str, Found], topology: str, name: str) -> None:
    stage = stage_of(topology)
    for warm in CELSIUS:
        theirs, point = by_hand[f"{topology} {name} {warm:g}"], scenario_point(stage, name, warm)
        volts, compared = point.solution.volts, 0
        nodes = {
            **HAND_NODES, stage.ports.exposed_plus: "ep", stage.ports.exposed_minus: "em",
            stage.ports.guarded_plus: "gp", stage.ports.guarded_minus: "gm",
        }  # fmt: skip
        low = float(volts[stage.ports.exposed_minus][0])
        for node, values in volts.items():
            if node in nodes:
                ours = float(values[0]) - low
                assert same_volts(ours, theirs[nodes[node]]), (warm, node, ours)
                compared += 1
        assert compared >= len(set(volts) - {"Q2.collector"})
        assert same_amps(float(point.exposed_A[0]), theirs["vexp#branch"]), warm
        main = float(point.part(stage.main).current_A[0])
        assert same_amps(main, theirs["vmain#branch"]), warm


def starter(name: str) -> Stage:
    text = files("benchkit.files.starters").joinpath(name).read_text(encoding="utf-8")
    return build_stage(parse(StageFile, text, name), name)


ODD: dict[str, Stage] = {
    "two-switches": starter("stage-network.toml"),
    "charger-with-fuse": starter("stage-charger.toml"),
    "limited-source": made("pmos-pass", tables="[source]\ncurrent_limit_A = 1.5"),
    "limited-source-into-clamp": made("clamp", tables="[source]\ncurrent_limit_A = 2.0"),
    "base-unprotected": made("pmos-sensed", D1=None),
    "base-unprotected-mirror": made("nmos-sensed", D1=None),
    "zener-at-30-V": made("pmos-pass-zener", tables="[battery]\nemf_max_V = 30"),
}
ASKED = (
    "@d1[id]", "@bd1_leakage[i]", "@rq1_series[i]", "@dq1_body[id]", "@bdq1_body_leakage[i]",
)  # fmt: skip


def written(name: str) -> Stage:
    return ODD[name] if name in ODD else stage_of(name)


def warmth(which: str) -> tuple[float, ...]:
    """The nine are compared warm, where a deck's parameters are not those at 25 C."""
    return (25.0,) if which in ODD else (100.0,)


@pytest.fixture(scope="module")
def as_written(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Found]:
    program = found_ngspice()
    decks = {
        f"{stage} {name} {warm:g}": scenario_deck(written(stage), name, warm, others=False)
        for stage in (*STAGES, *ODD)
        for name in SCENARIOS
        for warm in warmth(stage)
    }
    return operating_points(program, tmp_path_factory.mktemp("written"), decks, ASKED)


def check_currents(point: OperatingPoint, theirs: Found, warm: float) -> None:
    """Through every EMF and fuse, and through the main part; leakage runs cathode to anode."""
    ours = {name: float(amps[0]) for name, amps in point.solution.currents.items()}
    for element in point.circuit.elements:
        if isinstance(element, Emf | FuseLink):
            plain = f"v{element.name.replace('.', '_').lower()}#branch"
            assert same_amps(ours[element.name], theirs[plain]), (warm, element.name)
    main = point.stage.main
    if main == "Q1":
        leak = theirs.get("@bdq1_body_leakage[i]", 0.0)
        assert same_amps(abs(ours["Q1.series"]), abs(theirs["@rq1_series[i]"])), warm
        assert same_amps(ours["Q1.body"], theirs["@dq1_body[id]"] - leak), warm
    else:
        leak = theirs.get("@bd1_leakage[i]", 0.0)
        assert same_amps(ours[main], theirs[f"@{main.lower()}[id]"] - leak), warm


@pytest.mark.parametrize("name", SCENARIOS)
@pytest.mark.parametrize("which", [*STAGES, *ODD])
def test_as_written(as_written: Mapping[str, Found], which: str, name: str) -> None:
    stage = written(which)
    for warm in warmth(which):
        theirs, point = as_written[f"{which} {name} {warm:g}"], scenario_point(stage, name, warm)
        assert point.solution.settled.all()
        for node, values in point.solution.volts.items():
            if node != "0":
                plain = node.replace("+", "_plus").replace("-", "_minus").replace(".", "_").lower()
                assert same_volts(float(values[0]), theirs[plain]), (warm, node)
        check_currents(point, theirs, warm)


def test_an_unprotected_base_breaks_down_and_the_deck_shows_it(
    as_written: Mapping[str, Found],
) -> None:
    """Common practice, no source: a base-emitter junction breaks down at 5 to 7 V or so."""
    assert -8.0 < as_written["base-unprotected reversed-battery-off 25"]["base"] < -5.0
    assert as_written["pmos-sensed reversed-battery-off 100"]["base"] > -1.0


def test_a_supply_in_its_limit_gives_that(as_written: Mapping[str, Found]) -> None:
    found = as_written["limited-source-into-clamp reversed-source 25"]
    through_load = -found["exposed_plus"] / 6.0
    assert found["@d1[id]"] + through_load == pytest.approx(2.0, rel=0.05)
