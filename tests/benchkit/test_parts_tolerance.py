from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchkit.parts.tolerance import SIGMAS_TO_LIMIT, between, scores


def test_scores_are_a_cut_normal_and_reproducible() -> None:
    drawn = scores(np.random.default_rng(1), 200_000)
    assert np.abs(drawn).max() <= SIGMAS_TO_LIMIT
    assert drawn.mean() == pytest.approx(0, abs=0.01)
    # Standard deviation of a normal cut off at 3 sigma: sqrt(1 - 6 phi(3) / (2 Phi(3) - 1)).
    assert drawn.std() == pytest.approx(0.98658, abs=0.005)
    assert np.array_equal(drawn, scores(np.random.default_rng(1), 200_000))


def test_limits_and_middle_are_met_exactly() -> None:
    assert between(np.array([-3.0, 0.0, 3.0, 1.5]), 1.0, 2.0, 6.0) == pytest.approx([1, 2, 6, 4])


@settings(derandomize=True, deadline=None, max_examples=50)
@given(st.floats(-3, 3), st.floats(-3, 3))
def test_a_higher_score_is_never_a_lower_value(one: float, other: float) -> None:
    low, high = sorted((one, other))
    values = between(np.array([low, high]), 1.0, 1.2, 3.0)
    assert values[0] <= values[1]
