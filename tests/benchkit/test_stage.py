"""A stage built from its file: roles, samples and corners."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.errors import InputError
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.mosfet import MosfetLaws
from benchkit.parts.resistor import ResistorLaw
from benchkit.prediction.forward import forward
from benchkit.stage import Sample
from tests.benchkit.example_stages import PMOS, SCHOTTKY, build

RESISTOR = (
    '[parts.R1]\nkind = "resistor"\nvalue_ohm = 100\ntolerance_percent = 5\npower_max_W = 1\n'
)


def test_roles_are_filled_by_kind() -> None:
    stage = build(PMOS, ("[heat]", f"{RESISTOR}[heat]"))
    assert stage.names == {"pass": "Q1", "gate": "R1"}
    assert stage.main == "Q1"
    assert stage.junction_to_case_K_per_W == 4


def test_every_wrong_part_is_named_at_once() -> None:
    with pytest.raises(InputError) as caught:
        build(SCHOTTKY, ('topology = "series-diode"', 'topology = "pmos-pass"'),
              ("[heat]", f"{RESISTOR}{RESISTOR.replace('R1', 'R2')}[heat]"))  # fmt: skip
    assert str(caught.value).splitlines() == [
        "stage.toml: parts.D1 is a diode, which topology pmos-pass has no place for; its parts are "
        "pass (p-mosfet), gate (resistor), fuse (fuse), lead (lead)",
        "stage.toml: parts.R1 and parts.R2 are each a resistor, which is too many: topology "
        "pmos-pass takes no more than one as its 'gate'",
        "stage.toml: topology pmos-pass needs a p-mosfet as its 'pass', and none of the parts is "
        "that",
    ]


def resistance(sample: Sample) -> NDArray[np.float64]:
    law = sample.laws["R1"]
    assert isinstance(law, ResistorLaw)
    assert isinstance(law.ohms, np.ndarray)
    return law.ohms


def test_draws_are_reproducible_and_stay_within_the_limits() -> None:
    stage = build(PMOS, ("[heat]", f"{RESISTOR}[heat]"))
    one, again = stage.draw(500, 11), stage.draw(500, 11)
    assert np.array_equal(one.case_to_ambient_K_per_W, again.case_to_ambient_K_per_W)
    assert one.case_to_ambient_K_per_W.max() <= 60
    assert one.case_to_ambient_K_per_W.min() >= 45 * 45 / 60
    ohms = resistance(one)
    assert np.array_equal(ohms, resistance(again))
    assert 95 <= ohms.min() < 97
    assert 103 < ohms.max() <= 105
    assert not np.array_equal(ohms, resistance(stage.draw(500, 12)))


@pytest.mark.parametrize("text", [PMOS, SCHOTTKY])
def test_corners_bound_every_sample(text: str) -> None:
    stage = build(text)
    amps = np.array([0.1, 1.0, 2.0])
    least, most = (forward(stage, stage.corner(w), amps, 12.0, 40.0).drop_V for w in (-1, 1))
    drawn = forward(stage, stage.draw(300, 8), amps, 12.0, 40.0).drop_V
    typical = forward(stage, stage.typical(), amps, 12.0, 40.0).drop_V
    assert np.all(least < typical)
    assert np.all(typical < most)
    assert np.all((least <= drawn.min(axis=0)) & (drawn.max(axis=0) <= most))


def test_repeating_keeps_each_board_together() -> None:
    for text, name in ((PMOS, "Q1"), (SCHOTTKY, "D1")):
        drawn = build(text).draw(3, 1)
        twice = drawn.repeated(2)
        assert twice.size == 6
        law, many = drawn.laws[name], twice.laws[name]
        if isinstance(law, MosfetLaws):
            assert isinstance(many, MosfetLaws)
            law, many = law.body, many.body
        assert isinstance(law, DiodeLaw)
        assert isinstance(many, DiodeLaw)
        assert np.array_equal(many.saturation_A, np.repeat(law.saturation_A, 2))
        assert many.ideality == law.ideality


def test_conditions_broadcast_by_board() -> None:
    stage = build(PMOS)
    drawn = stage.draw(4, 1)
    junction = np.array([[25.0, 60.0, 100.0]] * 4)
    whole = forward(stage, drawn, np.array([1.0, 2.0, 3.0]), 12.0, junction).drop_V
    assert whole.shape == (4, 3)
    alone = forward(stage, drawn, 2.0, 12.0, 60.0).drop_V
    assert whole[:, 1] == pytest.approx(alone[:, 0], rel=1e-9)


def test_what_had_to_be_assumed_is_noted() -> None:
    assert any(note.startswith("Q1: one forward point only") for note in build(PMOS).notes)
