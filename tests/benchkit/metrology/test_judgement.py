import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.metrology import (
    Budget,
    Component,
    Decision,
    Expanded,
    Limit,
    judge,
    normalised_error,
    overall,
)


def known(U: float, dof: float = math.inf) -> Expanded:
    return Expanded(U=U, k=1.96, u=U / 1.96, dof=dof, coverage=0.95)


@pytest.mark.parametrize(
    ("measured", "guarded", "simple"),
    [
        (0.49, "pass", "pass"),
        (0.51, "undecided", "pass"),
        (0.60, "undecided", "pass"),
        (0.61, "undecided", "fail"),
        (0.70, "undecided", "fail"),
        (0.71, "fail", "fail"),
    ],
)
def test_guard_band_of_one_expanded_uncertainty(
    measured: float, guarded: Decision, simple: Decision
) -> None:
    # ILAC-G8:09/2019, 4.2.2 (simple acceptance) and 4.2.3 (guard band w = U).
    limit = Limit(None, 0.6)
    assert judge(measured, known(0.1), limit).verdict == guarded
    assert judge(measured, known(0.1), limit, rule="simple").verdict == simple


def test_both_limits_count_and_a_narrow_window_never_passes() -> None:
    limit = Limit(1.0, 2.0)
    assert judge(1.5, known(0.3), limit).verdict == "pass"
    assert judge(1.05, known(0.3), limit).verdict == "undecided"
    assert judge(0.6, known(0.3), limit).verdict == "fail"
    assert judge(1.5, known(0.6), limit).verdict == "undecided"
    assert judge(1.8, known(0.1), limit).margin == pytest.approx(0.2)


@pytest.mark.parametrize("rule", ["guarded", "simple"])
@pytest.mark.parametrize("measured", [math.nan, math.inf, -math.inf])
@pytest.mark.parametrize(
    "limit", [Limit(None, 1.0), Limit(0.0, None), Limit(-math.inf, math.inf), Limit(0.0, 1.0)]
)
def test_what_is_no_number_is_never_a_pass(measured: float, rule: str, limit: Limit) -> None:
    verdict = judge(measured, known(0.0), limit, rule=rule)  # type: ignore[arg-type]
    assert verdict.verdict == "undecided"
    assert math.isnan(verdict.conformity_probability)


@pytest.mark.parametrize("U", [math.nan, math.inf, -1.0])
def test_an_unknown_uncertainty_is_never_a_pass(U: float) -> None:
    assert judge(0.5, known(U), Limit(0.0, 1.0)).verdict == "undecided"
    assert judge(0.5, known(U), Limit(0.0, 1.0), rule="simple").verdict == "undecided"


def test_guarded_acceptance_leaves_at_most_two_and_a_half_percent_false_acceptance() -> None:
    # ILAC-G8:09/2019, table 1, and JCGM 106:2012, 8.3.2: normal measurand at the limit, w = U.
    rng = np.random.default_rng(8)
    n = 40_000
    expanded = Budget([Component("noise", 1.0)]).expanded()
    accepted = sum(
        judge(float(x), expanded, Limit(None, 0.0)).verdict == "pass"
        for x in rng.standard_normal(n)
    )
    assert accepted / n == pytest.approx(0.025, abs=4.0 * math.sqrt(0.025 * 0.975 / n))
    beyond = sum(
        judge(float(x) + 0.2, expanded, Limit(None, 0.0)).verdict == "pass"
        for x in rng.standard_normal(n)
    )
    assert beyond / n < 0.025


def test_conformity_probability() -> None:
    # JCGM 106:2012, 7.2: Phi((limit - y)/u); 50 % at the limit, 97.5 % one U inside.
    assert judge(0.6, known(0.1), Limit(None, 0.6)).conformity_probability == pytest.approx(0.5)
    assert judge(0.5, known(0.1), Limit(None, 0.6)).conformity_probability == pytest.approx(
        0.975, abs=1e-4
    )
    few = judge(0.5, known(0.1, dof=3.0), Limit(None, 0.6)).conformity_probability
    assert 0.90 < few < 0.97  # Student of three degrees of freedom has heavier tails
    assert judge(0.6, known(0.0), Limit(None, 0.6)).conformity_probability == 1.0
    assert judge(0.7, known(0.0), Limit(None, 0.6)).conformity_probability == 0.0


def test_normalised_error() -> None:
    # ISO/IEC 17043, annex B: En.
    assert normalised_error(1.5, 0.3, 1.0, 0.4) == pytest.approx(1.0)
    assert normalised_error(1.0, 0.0, 1.0, 0.0) == 0.0
    assert math.isinf(normalised_error(1.0, 0.0, 1.1, 0.0))
    assert math.isnan(normalised_error(math.nan, 0.0, 1.1, 0.0))


@given(st.lists(st.sampled_from(["pass", "fail", "undecided"]), max_size=6))
def test_a_run_passes_only_if_everything_passes(verdicts: list[Decision]) -> None:
    expected = "pass" if verdicts and set(verdicts) == {"pass"} else "undecided"
    if "fail" in verdicts:
        expected = "fail"
    assert overall(verdicts) == expected
    for order in itertools.islice(itertools.permutations(verdicts), 6):
        assert overall(order) == expected


def test_limits_that_mean_nothing_are_refused() -> None:
    with pytest.raises(ValueError, match="low, high or both"):
        Limit(None, None)
    with pytest.raises(ValueError, match="above high"):
        Limit(2.0, 1.0)
    with pytest.raises(ValueError, match="numbers"):
        Limit(math.nan, 1.0)
