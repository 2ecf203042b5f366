"""Working point and derating against closed forms."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.prediction import heat
from benchkit.prediction.heat import derating, working_point
from benchkit.stage import Sample, Stage
from tests.benchkit.example_stages import PMOS, SCHOTTKY, build

Floats = NDArray[np.float64]

OHM, PER_KELVIN = 0.02, 0.005
WHOLE = 45.0 + 4.0


def linear(_: Stage, sample: Sample, amps: Floats, volts: Floats, junction_C: Floats) -> object:
    """A resistance that rises in a straight line: P = I^2 R0 (1 + a (T - 25))."""
    shape = np.broadcast_shapes(np.shape(amps), np.shape(junction_C), (sample.size, 1))
    loss = amps**2 * OHM * (1 + PER_KELVIN * (np.asarray(junction_C) - 25))
    del volts
    return SimpleNamespace(
        loss_W=np.broadcast_to(loss, shape), main_W=np.broadcast_to(loss, shape),
        drop_V=np.broadcast_to(loss / amps, shape), carried=np.ones(shape, dtype=bool),
    )  # fmt: skip


def test_fixed_point_of_a_linear_resistance(monkeypatch: pytest.MonkeyPatch) -> None:
    """T = Ta + k (1 + a (T - 25)) with k = I^2 R0 Rth: T = (Ta + k (1 - 25 a)) / (1 - k a)."""
    monkeypatch.setattr(heat, "forward", linear)
    stage = build(PMOS)
    amps, ambient = np.array([1.0, 5.0, 8.0, 9.0]), 40.0
    k = amps**2 * OHM * WHOLE
    expected = (ambient + k * (1 - 25 * PER_KELVIN)) / (1 - k * PER_KELVIN)
    point = working_point(stage, stage.typical(), amps, 12.0, ambient)
    assert not point.runs_away.any()
    assert point.junction_C[0] == pytest.approx(expected, rel=1e-9)
    assert point.case_C[0] == pytest.approx(ambient + 45 * point.loss_W[0], rel=1e-9)


def test_runs_away_where_the_slope_reaches_one(monkeypatch: pytest.MonkeyPatch) -> None:
    """k a = 1 at I = 1 / sqrt(a R0 Rth) = 14.286 A; just below it the end is far above 250 C."""
    monkeypatch.setattr(heat, "forward", linear)
    stage = build(PMOS)
    critical = 1 / np.sqrt(PER_KELVIN * OHM * WHOLE)
    point = working_point(
        stage, stage.typical(), critical * np.array([0.5, 0.99, 1.01, 3.0]), 12.0, 40.0
    )
    assert point.runs_away[0].tolist() == [False, True, True, True]
    assert np.isnan(point.junction_C[0, 1:]).all()
    assert np.isnan(point.drop_V[0, 1:]).all()


def test_derating_of_a_linear_resistance(monkeypatch: pytest.MonkeyPatch) -> None:
    """I = sqrt((Tlimit - Ta) / (Rth R0 (1 + a (Tlimit - 25)))), up to the stage's own current."""
    monkeypatch.setattr(heat, "forward", linear)
    stage = build(PMOS, ("current_max_A = 5.0", "current_max_A = 12.0"))
    ambient = np.array([25.0, 60.0, 100.0, 140.0, 150.0, 160.0])
    allowed = np.maximum(150 - ambient, 0) / (WHOLE * OHM * (1 + PER_KELVIN * 125))
    found = derating(stage, stage.typical(), 12.0, ambient, 150.0)[0]
    assert found == pytest.approx(np.minimum(np.sqrt(allowed), 12.0), rel=2e-3)


@pytest.mark.parametrize("text", [PMOS, SCHOTTKY])
def test_derating_agrees_with_the_working_point(text: str) -> None:
    """At the current that the curve allows, the junction ends at its limit."""
    stage = build(text)
    amps = derating(stage, stage.typical(), 12.0, np.array([125.0, 140.0]), 150.0)[0]
    assert np.all(amps < stage.file.stage.current_max_A)
    for current, ambient in zip(amps, (125.0, 140.0), strict=True):
        point = working_point(stage, stage.typical(), current, 12.0, ambient)
        assert point.junction_C[0, 0] == pytest.approx(150.0, abs=0.2)


def test_a_warm_channel_drops_more_and_a_warm_junction_less() -> None:
    for text, sign in ((PMOS, 1), (SCHOTTKY, -1)):
        stage = build(text)
        cool, hot = (
            working_point(stage, stage.typical(), 2.0, 12.0, ambient).drop_V[0, 0]
            for ambient in (25.0, 60.0)
        )
        assert sign * (hot - cool) > 0


def test_balance_of_heat() -> None:
    stage = build(SCHOTTKY)
    sample = stage.draw(30, 2)
    point = working_point(stage, sample, np.array([0.5, 2.0]), 12.0, 60.0)
    rise = (sample.case_to_ambient_K_per_W[:, None] + 10.0) * point.loss_W
    assert point.junction_C == pytest.approx(60.0 + rise, abs=1e-5)
    assert point.loss_W == pytest.approx(point.drop_V * np.array([0.5, 2.0]), rel=1e-9)
