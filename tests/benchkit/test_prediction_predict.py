"""The whole prediction: its bands, its heat and its lowest useful voltage."""

from __future__ import annotations

import json

import numpy as np
import pytest

from benchkit.prediction.forward import forward
from benchkit.prediction.predict import USEFUL_RATIO, Prediction, predict
from tests.benchkit.example_stages import PMOS, SCHOTTKY, build


@pytest.fixture(scope="module")
def pmos() -> Prediction:
    return predict(build(PMOS), samples=120)


def test_typical_lies_in_its_band_and_the_band_within_the_corners(pmos: Prediction) -> None:
    for found in (pmos, predict(build(SCHOTTKY), samples=120)):
        for row in found.drop:
            assert row.corner_low_V <= row.low_V < row.nominal_V < row.high_V <= row.corner_high_V
            assert row.loss_W == pytest.approx(row.nominal_V * row.current_A, rel=1e-9)
        assert found.worst_residual < 1e-9


def test_the_same_seed_gives_the_same_figures(pmos: Prediction) -> None:
    again = predict(build(PMOS), samples=120).document()
    assert json.dumps(again) == json.dumps(pmos.document())
    other = predict(build(PMOS), samples=120, seed=7)
    assert other.drop[0].low_V != pmos.drop[0].low_V
    assert other.drop[0].nominal_V == pmos.drop[0].nominal_V


def test_document_has_the_keys_of_the_contract(pmos: Prediction) -> None:
    document = pmos.document()
    assert set(document) >= {
        "stage", "topology", "conditions", "drop", "scenarios", "heat", "lowest_useful_supply_V",
    }  # fmt: skip
    rows, heat = document["drop"], document["heat"]
    assert isinstance(rows, list)
    assert isinstance(heat, dict)
    assert set(rows[0]) >= {
        "current_A", "supply_V", "ambient_C", "nominal_V", "low_V", "high_V", "loss_W",
    }  # fmt: skip
    assert set(heat) >= {"case_C", "junction_C", "derating"}


def test_below_the_lowest_useful_voltage_the_channel_is_not_driven(pmos: Prediction) -> None:
    """Common practice, no source: near the threshold the resistance climbs; below, the drop is
    the body diode's."""
    stage = build(PMOS)
    lowest = pmos.lowest_useful_supply_V
    assert lowest is not None
    assert 1.7 < lowest < 9.0
    full, here, below, off = (
        forward(stage, stage.corner(1), 3.0, volts, 25.0).drop_V[0, 0]
        for volts in (12.0, lowest, lowest - 0.3, 1.5)
    )
    assert here <= USEFUL_RATIO * full < below
    assert 0.6 < off < 1.3
    assert predict(build(SCHOTTKY), samples=10).lowest_useful_supply_V is None


def test_a_stage_that_runs_away_is_said_to() -> None:
    stage = build(
        PMOS,
        ("case_to_ambient_K_per_W = 45", "case_to_ambient_K_per_W = 400"),
        ("case_to_ambient_max_K_per_W = 60", "case_to_ambient_max_K_per_W = 500"),
    )
    found = predict(stage, samples=40)
    assert found.runs_away
    assert np.isnan(found.drop[-1].high_V)  # the boards that do not run away make no band
    assert np.isfinite(found.drop[0].high_V)
    assert np.isinf(found.junction_C)
    assert any("they run away" in note for note in found.notes)
    junction = next(
        r for s in found.scenarios for r in s.ratings if r.rating == "junction temperature"
    )
    assert not junction.holds
