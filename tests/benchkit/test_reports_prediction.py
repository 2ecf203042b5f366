"""The page of a prediction: what it says, and that its curves are those of the solver."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from functools import cache
from html import unescape
from html.parser import HTMLParser
from typing import get_args

import numpy as np
import pytest

from benchkit.files.loading import parse
from benchkit.files.stage import ScenarioName, StageFile
from benchkit.prediction.connections import SCENARIOS
from benchkit.prediction.curves import Curves, curves
from benchkit.prediction.forward import forward
from benchkit.prediction.heat import working_point
from benchkit.prediction.predict import Prediction, predict
from benchkit.reports import prediction_words
from benchkit.reports.prediction import prediction_page
from benchkit.reports.prediction_words import label, quantity, said
from benchkit.stage import Stage, build_stage
from benchkit.topologies import TOPOLOGIES
from tests.benchkit.nine_stages import PARTS, STAGES, made, text

CHANNELS = [name for name in STAGES if "mos" in name]
VOID = {"meta", "br", "link", "img", "input", "hr"}
NETWORK = """
[[network]]
part = "D1"
anode = "exposed+"
cathode = "guarded+"
[[network]]
part = "D2"
anode = "exposed-"
cathode = "guarded+"
"""


def read(toml: str) -> Stage:
    return build_stage(parse(StageFile, toml, "stage.toml"), "stage.toml")


def changed(topology: str, *changes: tuple[str, str]) -> Stage:
    toml = text(topology)
    for old, new in changes:
        assert old in toml
        toml = toml.replace(old, new)
    return read(toml)


@cache
def shown(topology: str) -> tuple[Stage, Prediction, str]:
    stage = made(topology)
    prediction = predicted(stage)
    return stage, prediction, prediction_page(stage, prediction)


def predicted(stage: Stage) -> Prediction:
    """From few boards: the page is the same."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("benchkit.prediction.predict.SCENARIO_SAMPLES", 30)
        return predict(stage, samples=60)


def page_of(stage: Stage) -> str:
    return prediction_page(stage, predicted(stage))


def words(html: str) -> str:
    """What a reader sees, in the plain spelling of the prediction."""
    seen = re.sub(r"<(style|defs)\b.*?</\1>", " ", html, flags=re.DOTALL)
    plain = unescape(re.sub(r"<[^>]*>", " ", seen))
    for theirs, ours in (("\u00a0", " "), ("−", "-"), ("²", "2"), (" Ω", " ohm")):
        plain = plain.replace(theirs, ours)
    return re.sub(r"\s+", " ", plain)


class Nesting(HTMLParser):
    """Every tag closed, in order, and every id given once."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.ids: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.ids += [value or "" for key, value in attrs if key == "id"]
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.handle_starttag(tag, attrs)
        if tag not in VOID:
            self.open.pop()

    def handle_endtag(self, tag: str) -> None:
        assert self.open
        assert self.open.pop() == tag


@pytest.mark.parametrize("topology", STAGES)
def test_the_page_is_whole_and_stands_alone(topology: str) -> None:
    html = shown(topology)[2]
    nesting = Nesting()
    nesting.feed(html)
    nesting.close()
    assert nesting.open == []
    assert len(nesting.ids) == len(set(nesting.ids))
    outside = set(re.findall(r"https?://[^\s\"'<)]+", html))
    assert outside <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}
    for way in ("<script", "<link", "<img", "@import", "url(http", "src="):
        assert way not in html
    places = [
        html.index(f'id="{name}"')
        for name in ("front", "circuit", "curves", "scenarios", "notes", "cautions")
    ]
    assert places == sorted(places)


@pytest.mark.parametrize("topology", STAGES)
def test_every_scenario_says_all_that_the_prediction_says(topology: str) -> None:
    _, prediction, html = shown(topology)
    seen = words(html)
    folded = seen.replace("°C", "C").lower()
    for scenario in prediction.scenarios:
        assert prediction_words.SCENARIOS[scenario.name] in seen
        at = html.index(f'class="way" id="{scenario.name}"')
        own = html[at : html.index("</section>", at)]
        assert own.count("<tr><td>") + own.count('<tr class="breach"><td>') == len(
            scenario.ratings
        ) + len(scenario.parts)
        assert own.count('<tr class="breach">') == sum(not r.holds for r in scenario.ratings)
        for note in scenario.notes:
            assert note.replace("°C", "C").lower() in folded
    for note in prediction.notes:
        assert note.lower() in folded


@pytest.mark.parametrize("topology", STAGES)
def test_no_figure_is_spelled_as_a_computer_does(topology: str) -> None:
    seen = words(shown(topology)[2])
    assert not re.findall(r"\b(?:None|True|False)\b|(?i:\b(?:inf|nan)\b)", seen)
    assert not re.findall(r"\d[eE][+-]?\d", seen)
    assert not re.findall(r"\d\.\d{4,}", seen)


def test_the_same_stage_gives_the_same_bytes() -> None:
    stage, prediction, html = shown("pmos-sensed")
    shown("clamp")
    assert prediction_page(stage, prediction) == html


def test_every_scenario_and_topology_has_words() -> None:
    assert set(prediction_words.SCENARIOS) == set(SCENARIOS)
    assert set(SCENARIOS) == set(get_args(ScenarioName))
    assert set(prediction_words.TOPOLOGIES) == {*TOPOLOGIES, "network"}
    roles = {role for topology in TOPOLOGIES.values() for role in topology.roles}
    assert set(prediction_words.ROLES) == roles


def test_the_answer_comes_first_and_names_what_does_not_hold() -> None:
    html = page_of(changed("pmos-pass", ("supply_max_V = 15.0", "supply_max_V = 48.0")))
    front = words(html[: html.index('id="circuit"')])
    assert "No: 2 of the 2 scenarios that it must stand do not hold." in front
    assert "Q1 gate-source voltage 48 V, rated 20 V" in front
    assert "Q1 drain-source voltage 48 V, rated 40 V" in front
    assert "LESS than the 48 V it is meant for" in front
    assert html.count("DOES NOT HOLD") > 4
    good = words(shown("pmos-sensed")[2])
    assert "Yes: every rating holds" in good
    assert "DOES NOT HOLD" not in good


def test_what_is_not_asked_is_told_apart() -> None:
    seen = words(shown("pmos-pass")[2])
    assert "Yes: every rating holds" in seen
    assert "Not asked of this stage, and it would not hold there: source reversed" in seen
    assert "does not hold (not asked)" in seen


def test_nothing_asked_is_not_passed() -> None:
    html = page_of(made("series-diode", "must_stand = []"))
    assert "Nothing is asked of it" in html
    assert "Yes: every rating holds" not in html


def test_a_stage_that_runs_away_says_so_in_words() -> None:
    stage = changed(
        "pmos-pass", ("current_max_A = 3.0", "current_max_A = 9.0"), ("2.0, 3.0]", "2.0, 9.0]"),
        ("case_to_ambient_K_per_W = 35", "case_to_ambient_K_per_W = 60"),
        ("case_to_ambient_max_K_per_W = 45", "case_to_ambient_max_K_per_W = 80"),
    )  # fmt: skip
    prediction = predicted(stage)
    assert prediction.runs_away
    assert math.isnan(prediction.drop[-1].corner_high_V)
    seen = words(prediction_page(stage, prediction))
    assert "RUNS AWAY in some boards within tolerance" in seen
    assert "Q1 junction temperature runs away, rated 150 °C" in seen
    assert "one runs away" in seen
    assert not re.findall(r"(?i)\b(?:inf|nan)\b", seen)


def test_a_fuse_that_does_not_save_fails_the_scenario_whatever_the_ratings_say() -> None:
    stage, prediction, html = shown("fused-clamp")
    front = words(html[: html.index('id="circuit"')])
    assert "The fuse is coordinated" in front
    assert prediction.fuse is not None
    broken = [
        replace(s, fuse=replace(s.fuse, coordinated=False, clears_in_s=math.inf))
        if s.fuse is not None else s
        for s in prediction.scenarios
    ]  # fmt: skip
    assert all(rating.holds for s in broken for rating in s.ratings)
    seen = words(prediction_page(stage, replace(prediction, scenarios=broken)))
    assert "No: 2 of the 5 scenarios that it must stand do not hold." in seen
    assert "the fuse is not coordinated" in seen
    assert "it may never open" in seen


def test_a_guarded_side_that_is_not_guarded_fails_the_scenario() -> None:
    stage, prediction, _ = shown("series-diode")
    pulled = [
        replace(s, guarded_V=-11.9, protected=False) if s.name == "reversed-source" else s
        for s in prediction.scenarios
    ]
    seen = words(prediction_page(stage, replace(prediction, scenarios=pulled)))
    assert "the guarded side is pulled to -11.9 V" in seen


def test_a_circuit_of_ones_own_is_shown_as_a_table() -> None:
    toml = text("series-diode", 'guards = "load"\nmain = "D1"', D2=PARTS["rectifier"])
    stage = read(toml.replace('topology = "series-diode"', 'topology = "network"') + NETWORK)
    html = page_of(stage)
    assert "Schematic:" not in html
    seen = words(html)
    assert "anode → exposed+, cathode → guarded+" in seen
    assert "anode → exposed-, cathode → guarded+" in seen


@pytest.mark.parametrize("topology", STAGES)
def test_the_drawing_names_every_part_with_its_value(topology: str) -> None:
    stage, _, html = shown(topology)
    drawing = html[html.index('class="drawing"') : html.index("<table", html.index("drawing"))]
    for reference, part in stage.file.parts.items():
        assert f">{reference}</text>" in drawing
        assert label(part).replace("\u00a0", " ") in drawing


def test_all_that_a_user_typed_is_escaped() -> None:
    stage = changed("clamp", ("Buoy charger, clamp", "<script>alert(1)</script>"))
    html = page_of(stage)
    assert "<script" not in html
    assert "&lt;script&gt;" in html


@cache
def lines(topology: str) -> tuple[Stage, Curves]:
    stage = made(topology)
    return stage, curves(stage, boards=40)


@pytest.mark.parametrize("topology", STAGES)
def test_the_drop_curve_is_the_steady_state(topology: str) -> None:
    stage, drawn = lines(topology)
    working = stage.file.stage
    assert {*stage.file.sweep.currents_A, working.current_nominal_A} <= set(drawn.drop.at)
    k = drawn.drop.at.size // 2
    amps = float(drawn.drop.at[k])
    at = amps, working.supply_nominal_V, working.ambient_nominal_C
    typical = working_point(stage, stage.typical(), *at)
    assert drawn.drop.typical[k] == pytest.approx(float(typical.drop_V[0, 0]), rel=1e-6)
    # At its own junction temperature ``forward`` alone gives the same.
    own = forward(stage, stage.typical(), amps, at[1], float(typical.junction_C[0, 0]))
    assert drawn.drop.typical[k] == pytest.approx(float(own.drop_V[0, 0]), rel=1e-6)
    least, most = drawn.corners
    assert (least <= drawn.drop.low + 1e-9).all()
    assert (drawn.drop.high <= most + 1e-9).all()


@pytest.mark.parametrize("topology", CHANNELS)
def test_the_curves_against_supply_are_those_of_the_circuit(topology: str) -> None:
    stage, drawn = lines(topology)
    working = stage.file.stage
    assert drawn.supply_drop is not None
    assert drawn.gate is not None
    k = int(np.searchsorted(drawn.gate.at, working.supply_nominal_V))
    volts = float(drawn.gate.at[k])
    assert volts == working.supply_nominal_V
    one = forward(stage, stage.typical(), working.current_nominal_A, volts, drawn.junction_C)
    assert one.gate_V is not None
    assert drawn.supply_drop.typical[k] == pytest.approx(float(one.drop_V[0, 0]), rel=1e-6)
    assert drawn.gate.typical[k] == pytest.approx(abs(float(one.gate_V[0, 0])), rel=1e-6)
    assert drawn.gate.typical[k] > 0


@pytest.mark.parametrize("topology", CHANNELS)
def test_no_stage_drops_more_than_it_is_given(topology: str) -> None:
    band = lines(topology)[1].supply_drop
    assert band is not None
    assert band.at[0] == pytest.approx(0.3)
    assert (band.high <= band.at).all()
    assert band.typical[0] == band.at[0]
    assert band.typical[-1] < 0.1
    gate = lines(topology)[1].gate
    assert gate is not None
    assert np.isnan(gate.typical[0])
    assert np.isfinite(gate.typical[-1])


def test_the_derated_current_warms_the_junction_to_its_limit() -> None:
    stage, drawn = lines("series-diode")
    assert drawn.derated is not None
    working, limit = stage.file.stage, stage.main_part.junction_max_C
    carried = drawn.derated.typical
    k = int(np.flatnonzero(carried < 0.8 * working.current_max_A)[0])
    ambient = float(drawn.derated.at[k])
    point = working_point(
        stage, stage.typical(), float(carried[k]), working.supply_nominal_V, ambient
    )
    assert float(point.junction_C[0, 0]) == pytest.approx(limit, abs=0.5)
    assert (drawn.derated.low <= drawn.derated.typical + 1e-9).all()


def test_a_stage_shows_the_curves_that_it_has() -> None:
    clamp, fused, diode = (lines(name)[1] for name in ("clamp", "fused-clamp", "series-diode"))
    assert clamp.derated is None
    assert clamp.fuse_A is None
    assert fused.derated is None
    # 75 % of its rating for a UL 248-14 fuse at 25 degrees (common practice, no source).
    assert fused.fuse_A is not None
    assert fused.fuse_A[0] == pytest.approx(0.75 * 5)
    assert (np.diff(fused.fuse_A) < 0).all()
    assert diode.supply_drop is None
    assert "There is no drop to draw" in shown("clamp")[2]
    assert "There is no curve against supply voltage" in shown("series-diode")[2]
    assert "There is no curve against supply voltage" not in shown("nmos-pass")[2]


@pytest.mark.parametrize(
    ("value", "unit", "spelling"),
    [
        (2.4e-6, "A", "2.4 µA"), (15e-3, "A", "15 mA"), (0.9996, "A", "1 A"),
        (999.6, "A", "1 kA"), (634.56, "A", "635 A"), (4700.0, "Ω", "4.7 kΩ"),
        (-0.569, "V", "−569 mV"), (1e-9, "V", "0 V"), (3e-13, "A", "0 A"),
        (45000.0, "A2s", "45000 A²s"), (93.4, "C", "93 °C"), (-3.24, "K", "−3.2 K"),
        (-0.04, "K", "0 K"), (0.0, "W", "0 W"), (math.nan, "V", "–"),
    ],
)  # fmt: skip
def test_quantities_read_as_a_technician_writes_them(
    value: float, unit: str, spelling: str
) -> None:
    assert quantity(value, unit).replace("\u00a0", " ").replace("− ", "−") == spelling


def test_figures_that_are_compared_keep_their_zeros() -> None:
    assert quantity(0.044, "V", whole=True) == "44.0\u00a0mV"
    assert quantity(0.9996, "A", whole=True) == "1.00\u00a0A"


def test_sentences_are_spelled_in_the_page_s_units() -> None:
    assert said("lets 40 A2s through 6 ohm at -0.5 V and 25 C, type 5-7") == (
        "Lets 40 A²s through 6 Ω at −0.5\u00a0V and 25\u00a0°C, type 5-7."
    )
