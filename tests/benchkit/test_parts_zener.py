"""Zeners and transient suppressors: from a sheet's points to a diode with a knee."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from pydantic import ValidationError

from benchkit.errors import InputError
from benchkit.files.parts import Tvs, Zener
from benchkit.parts.diode import DiodeModel
from benchkit.parts.zener import tvs_model, usual_tempco, zener_model

ZENER: dict[str, Any] = {
    "kind": "zener", "voltage": {"min_V": 11.4, "typ_V": 12.0, "max_V": 12.7, "current_A": 5e-3},
    "dynamic_ohm": 25.0, "knee_ohm": 80.0, "knee_current_A": 1e-3, "tempco_V_per_K": 8e-3,
    "forward": [{"current_A": 0.01, "typ_V": 0.76}, {"current_A": 0.1, "typ_V": 0.88}],
    "power_max_W": 0.3, "junction_max_C": 150.0,
}  # fmt: skip
TVS: dict[str, Any] = {
    "kind": "tvs", "forward": [{"current_A": 1.0, "typ_V": 0.85}, {"current_A": 50, "typ_V": 3.0}],
    "leakage": [{"reverse_V": 24.0, "typ_A": 1e-7, "max_A": 1e-6}], "stand_off_V": 24.0,
    "breakdown": {"min_V": 26.7, "max_V": 29.5, "current_A": 1e-3}, "clamping_V": 39.0,
    "clamping_A": 15.0, "average_current_max_A": 1.0, "surge_current_max_A": 100.0,
    "surge_width_ms": 10.0, "junction_max_C": 150.0,
}  # fmt: skip


def without(table: dict[str, Any], *keys: str) -> dict[str, Any]:
    return {key: value for key, value in table.items() if key not in keys}


def zener(**changes: Any) -> DiodeModel:
    return zener_model("Z1", Zener.model_validate({**ZENER, **changes}))


def tvs(**changes: Any) -> DiodeModel:
    return tvs_model("D2", Tvs.model_validate({**TVS, **changes}))


def reverse_A(model: DiodeModel, volts: float, score: float = 0.0) -> float:
    zero = np.zeros(1)
    law = model.sample(zero, zero, np.array([score])).at(25.0)
    return -float(law.current(np.array([-volts]))[0][0])


def reverse_ohm(model: DiodeModel, amps: float) -> float:
    """Dynamic resistance at a reverse current, found by bisection."""
    at, low, high = model.typical.at(25.0), 0.0, 100.0
    for _ in range(80):
        middle = 0.5 * (low + high)
        low, high = (
            (middle, high) if -at.current(np.array([-middle]))[0][0] < amps else (low, middle)
        )
    return 1 / float(at.current(np.array([-low]))[1][0])


def test_printed_zener_points_are_reproduced() -> None:
    model = zener()
    assert not [note for note in model.notes if "dynamic" in note or "coefficient" in note]
    assert reverse_A(model, 12.0) == pytest.approx(5e-3, rel=1e-6)
    assert reverse_ohm(model, 5e-3) == pytest.approx(25.0, rel=1e-4)
    assert reverse_ohm(model, 1e-3) == pytest.approx(80.0, rel=1e-4)
    assert float(model.typical.forward_V(0.1, 25.0)) == pytest.approx(0.88, rel=0.002)


@pytest.mark.parametrize(("score", "volts"), [(-3.0, 11.4), (0.0, 12.0), (3.0, 12.7)])
def test_limits_of_the_voltage(score: float, volts: float) -> None:
    assert reverse_A(zener(), volts, score) == pytest.approx(5e-3, rel=1e-6)
    untypical = {"min_V": 11.4, "max_V": 12.7, "current_A": 5e-3}
    middle = 12.05 if score == 0 else volts
    assert reverse_A(zener(voltage=untypical), middle, score) == pytest.approx(5e-3, rel=1e-6)


def test_voltage_moves_with_temperature_as_printed() -> None:
    at = zener().typical.at(85.0)
    amps = -at.current(np.array([-(12.0 + 60 * 8e-3)]))[0][0]
    assert amps == pytest.approx(5e-3, rel=1e-4)


def test_usual_temperature_coefficient_changes_sign_between_tunnelling_and_avalanche() -> None:
    """Common practice, no source: falls below about 5 V, rises above about 6 V."""
    assert usual_tempco(2.4) == pytest.approx(-2e-3)
    assert usual_tempco(3.3) < 0
    assert usual_tempco(5.1) == usual_tempco(5.6) == 0
    assert 0 < usual_tempco(6.8) < 5e-3
    assert usual_tempco(10.0) == pytest.approx(9e-3)
    assert usual_tempco(27.0) == pytest.approx(24.3e-3)
    volts = np.linspace(2, 60, 200)
    assert np.all(np.diff([usual_tempco(v) for v in volts]) >= 0)


def test_what_a_zener_lacks_is_said_in_words() -> None:
    bare = without(ZENER, "knee_ohm", "knee_current_A", "tempco_V_per_K", "forward")
    model = zener_model("Z1", Zener.model_validate(bare))
    notes = " / ".join(model.notes)
    assert "dynamic resistance is given at one current only" in notes
    assert "11 mV/K is taken, as is usual at 12 V" in notes
    assert "no forward point is given; 0.75 V at 0.01 A and 0.85 V at 0.1 A are taken" in notes
    assert len(model.notes) == 3
    assert reverse_A(model, 12.0) == pytest.approx(5e-3, rel=1e-6)
    assert reverse_ohm(model, 5e-3) == pytest.approx(25.0, rel=1e-4)


def test_a_low_zener_whose_two_resistances_no_knee_has() -> None:
    """As sheets print below 4 V: the dynamic resistance falls less than the current rises."""
    low = {"min_V": 2.2, "max_V": 2.6, "current_A": 5e-3}
    model = zener(voltage=low, dynamic_ohm=100.0, knee_ohm=600.0, tempco_V_per_K=-1.6e-3)
    assert any("no exponential knee has both its dynamic resistances" in n for n in model.notes)
    assert reverse_A(model, 2.4) == pytest.approx(5e-3, rel=1e-3)
    assert reverse_ohm(model, 5e-3) == pytest.approx(100.0, rel=1e-3)
    assert 100 < reverse_ohm(model, 1e-3) < 600


def test_leakage_below_the_knee() -> None:
    model = zener(leakage=[{"reverse_V": 8.0, "typ_A": 2e-8, "max_A": 1e-7}])
    assert reverse_A(model, 8.0) == pytest.approx(2e-8, rel=1e-6)


def test_printed_suppressor_points_are_reproduced() -> None:
    model = tvs()
    for score, volts in ((-3.0, 26.7), (0.0, 28.1), (3.0, 29.5)):
        assert reverse_A(model, volts, score) == pytest.approx(1e-3, rel=0.01)
    assert reverse_A(model, 39.0, 3.0) == pytest.approx(15.0, rel=0.01)
    assert reverse_A(model, 24.0) == pytest.approx(1e-7, rel=0.01)
    worst = model.worst.at(25.0).current(np.array([-39.0, -24.0]))[0]
    assert -worst == pytest.approx([15.0, 1e-6], rel=0.01)


def test_what_a_suppressor_lacks_is_said_in_words() -> None:
    bare = without(TVS, "clamping_V", "clamping_A", "leakage")
    model = tvs_model("D2", Tvs.model_validate(bare))
    notes = " / ".join(model.notes)
    assert "no clamping point is given; a dynamic resistance of 0.45 ohm is taken" in notes
    assert "no leakage points are given" in notes
    assert "25 mV/K is taken" in notes
    # A 600 W part of that voltage clamps some 16 A at 1.35 times (common practice, no source).
    assert reverse_A(model, 1.35 * 28.1) == pytest.approx(16, rel=0.1)


def test_surge_of_a_suppressor_is_that_of_its_half_sine() -> None:
    assert Tvs.model_validate(TVS).surge_A2s == pytest.approx(100**2 * 0.010 / 2)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        (
            {"knee_ohm": 20.0},
            "parts.Z1.knee_ohm 20 must be above parts.Z1.dynamic_ohm 25: dynamic resistance falls "
            "as the current rises",
        ),
        (
            {"knee_current_A": 5e-3},
            "parts.Z1.knee_current_A 0.005 must be below parts.Z1.voltage.current_A 0.005: the "
            "knee is where a Zener just conducts",
        ),
        ({"knee_current_A": None}, "parts.Z1.knee_ohm needs parts.Z1.knee_current_A beside it"),
        ({"knee_ohm": None}, "parts.Z1.knee_current_A needs parts.Z1.knee_ohm beside it"),
        (
            {"dynamic_ohm": 2500.0, "knee_ohm": None, "knee_current_A": None},
            "parts.Z1.dynamic_ohm is 2500 ohm at 0.005 A, which makes 12 V of 12 V: check the "
            "resistance and parts.Z1.voltage.current_A",
        ),
        (
            {"tempco_V_per_K": 8.0},
            "parts.Z1.tempco_V_per_K is 8, it must be within 0.06 either way at 12 V: it is in "
            "volts, not millivolts, per kelvin",
        ),
        (
            {"power_max_W": 0.05},
            "parts.Z1.power_max_W 0.05 is below the 0.06 W of its own test point, 12 V at 0.005 A",
        ),
    ],
)
def test_contradictions_of_a_zener_are_named(changes: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError) as caught:
        zener(**changes)
    assert str(caught.value) == message


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        (
            {"stand_off_V": 27.0},
            "parts.D2.stand_off_V 27 must be below parts.D2.breakdown.min_V 26.7: up to its "
            "stand-off voltage a suppressor does not conduct",
        ),
        (
            {"clamping_V": 29.0},
            "parts.D2.clamping_V 29 must be above parts.D2.breakdown.max_V 29.5: a suppressor's "
            "voltage rises with current",
        ),
        (
            {"clamping_A": 5e-4},
            "parts.D2.clamping_A 0.0005 must be above parts.D2.breakdown.current_A 0.001: "
            "clamping is at the peak of a surge",
        ),
        ({"clamping_A": None}, "parts.D2.clamping_V needs parts.D2.clamping_A beside it"),
    ],
)
def test_contradictions_of_a_suppressor_are_named(changes: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError) as caught:
        tvs(**changes)
    assert str(caught.value) == message


def test_a_window_must_rise() -> None:
    upside_down = {"min_V": 12.7, "max_V": 11.4, "current_A": 5e-3}
    with pytest.raises(ValidationError, match=r"min_V 12\.7, typ_V 12\.05 and max_V 11\.4 must"):
        zener(voltage=upside_down)
