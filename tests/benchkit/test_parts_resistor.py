"""Resistors and leads: value, tolerance, temperature."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from benchkit.files.parts import Lead, Resistor
from benchkit.parts.resistor import resistor_model

NONE = np.zeros(1)


def resistor(**changes: object) -> Resistor:
    table = {"kind": "resistor", "value_ohm": 4700.0, "power_max_W": 0.25, **changes}
    return Resistor.model_validate(table)


def lead(**changes: object) -> Lead:
    return Lead.model_validate({"kind": "lead", "value_ohm": 0.020, **changes})


@settings(derandomize=True, deadline=None, max_examples=50)
@given(st.floats(1e-4, 1e7), st.floats(0, 50))
def test_scores_of_three_are_the_tolerance(ohms: float, percent: float) -> None:
    model = resistor_model("R1", resistor(value_ohm=ohms, tolerance_percent=percent))
    drawn = model.sample(np.array([-3.0, 0.0, 3.0]), np.zeros(3), np.zeros(3))
    share = percent / 100
    assert drawn.at(25.0).ohms == pytest.approx(ohms * np.array([1 - share, 1, 1 + share]))


def test_copper_by_its_handbook_value() -> None:
    """0.393 % per kelvin of the value at 20 C (handbook value, from memory)."""
    law = resistor_model("W1", lead()).typical
    for celsius in (-40.0, 20.0, 25.0, 120.0):
        expected = 0.020 * (1 + 0.00393 * (celsius - 20))
        assert float(np.asarray(law.at(celsius).ohms)) == pytest.approx(expected, rel=1e-12)


def test_copper_has_no_resistance_left_at_its_inferred_zero() -> None:
    """-234.5 C for annealed copper (handbook value, from memory)."""
    law = resistor_model("W1", lead()).typical
    assert float(np.asarray(law.at(-234.5).ohms)) == pytest.approx(0.0, abs=0.0001)


def test_coefficient_of_a_resistor_is_of_its_value_at_25() -> None:
    law = resistor_model("R1", resistor(tempco_ppm_per_K=100.0)).typical
    assert law.at(np.array([25.0, 125.0])).ohms == pytest.approx([4700.0, 4747.0])


@settings(derandomize=True, deadline=None, max_examples=80)
@given(st.floats(-4000, 9000), st.floats(-80, 250), st.floats(-3, 3))
def test_always_positive(ppm: float, celsius: float, score: float) -> None:
    for model in (
        resistor_model("R1", resistor(tempco_ppm_per_K=ppm, tolerance_percent=50.0)),
        resistor_model("W1", lead(tempco_ppm_per_K=ppm)),
    ):
        ohms = model.sample(np.array([score]), NONE, NONE).at(celsius).ohms
        assert float(np.asarray(ohms)[0]) > 0


def test_beyond_a_linear_law() -> None:
    with pytest.raises(ValidationError, match="less than or equal to 9000"):
        resistor(tempco_ppm_per_K=40000.0)
