import math

import numpy as np
import pytest

from benchkit.lots import (
    generalised_esd,
    summarise,
    tolerance_factor_one_sided,
    tolerance_factor_two_sided,
)
from benchkit.metrology import Limit


def test_one_sided_tolerance_factors() -> None:
    # Montgomery, Introduction to Statistical Quality Control, table XII, 95/95 (as in the tests of
    # the toleranceinterval 1.0.3 package, MIT).
    assert tolerance_factor_one_sided(10, 0.95, 0.95) == pytest.approx(2.911, abs=5e-4)
    assert tolerance_factor_one_sided(30, 0.95, 0.95) == pytest.approx(2.220, abs=5e-4)


def test_two_sided_tolerance_factors() -> None:
    # ISO 16269-6:2014, annex F, 95/95, which rounds up.
    assert math.ceil(tolerance_factor_two_sided(10, 0.95, 0.95) * 1e4) == 33935
    assert math.ceil(tolerance_factor_two_sided(26, 0.95, 0.95) * 1e4) == 26188


def test_tolerance_intervals_hold_their_share_with_their_confidence() -> None:
    rng = np.random.default_rng(3)
    k = tolerance_factor_two_sided(5, 0.9, 0.9)
    x = rng.standard_normal((20_000, 5))
    mean, sd = x.mean(axis=1), x.std(axis=1, ddof=1)
    from scipy.special import ndtr

    share = np.mean(ndtr(mean + k * sd) - ndtr(mean - k * sd) >= 0.9)
    assert share == pytest.approx(0.9, abs=4.0 * math.sqrt(0.09 / 20_000))


ROSNER = [
    -0.25, 0.68, 0.94, 1.15, 1.20, 1.26, 1.26, 1.34, 1.38, 1.43, 1.49, 1.49, 1.55, 1.56, 1.58,
    1.65, 1.69, 1.70, 1.76, 1.77, 1.81, 1.91, 1.94, 1.96, 1.99, 2.06, 2.09, 2.10, 2.14, 2.15,
    2.23, 2.24, 2.26, 2.35, 2.37, 2.40, 2.47, 2.54, 2.62, 2.64, 2.90, 2.92, 2.92, 2.93, 3.21,
    3.26, 3.30, 3.59, 3.68, 4.30, 4.64, 5.34, 5.42, 6.01,
]  # fmt: skip


def test_outliers_of_rosner() -> None:
    # NIST/SEMATECH handbook 1.3.5.17.3, Rosner's 54 points (from memory): three outliers, though
    # the first two alone are masked by the third.
    assert len(ROSNER) == 54
    assert generalised_esd(ROSNER, most=10) == [53, 52, 51]
    assert generalised_esd(ROSNER[:-3], most=10) == []


def test_a_clean_lot_seldom_has_outliers() -> None:
    rng = np.random.default_rng(11)
    called = sum(bool(generalised_esd(rng.standard_normal(30))) for _ in range(600))
    assert called / 600 == pytest.approx(0.05, abs=4.0 * math.sqrt(0.05 * 0.95 / 600))


def test_a_lot_against_its_limits() -> None:
    rng = np.random.default_rng(5)
    values = list(10.0 + 0.5 * rng.standard_normal(40))
    values[7] = 20.0
    lot = summarise(values, Limit(None, 12.0), U=[0.1] * 40)
    assert lot.outliers == (7,)
    clean = summarise(values[:7] + values[8:], Limit(None, 12.0), U=[0.1] * 39)
    assert clean.mean is not None
    assert clean.sd is not None
    assert clean.ppk == pytest.approx((12.0 - clean.mean) / (3.0 * clean.sd))
    assert clean.tolerance_upper == pytest.approx(clean.mean + 2.1279 * clean.sd, rel=2e-3)
    assert clean.tolerance_two_sided is not None
    assert clean.tolerance_two_sided[0] < clean.mean < clean.tolerance_two_sided[1]
    assert clean.normality_p is not None
    assert clean.normality_p > 0.05
    assert clean.outliers == ()
    assert clean.mean_U == pytest.approx(0.1)
    assert clean.notes == ()
    assert lot.normality_p is not None
    assert lot.normality_p < 1e-6


def test_capability_interval_holds_the_true_index() -> None:
    # Bissell 1990, by simulation: mean 0, sd 1, limit 4, so the index is 4/3.
    rng = np.random.default_rng(2)
    held = 0
    for _ in range(400):
        x = rng.standard_normal(25)
        lot = summarise(list(x), Limit(None, 4.0))
        assert lot.ppk_low is not None
        assert lot.ppk_high is not None
        held += lot.ppk_low <= 4.0 / 3.0 <= lot.ppk_high
    assert held / 400 == pytest.approx(0.95, abs=4.0 * math.sqrt(0.95 * 0.05 / 400))


def test_a_trend_against_order_is_seen() -> None:
    rng = np.random.default_rng(4)
    drifting = summarise(list(np.arange(20) * 0.1 + 0.3 * rng.standard_normal(20)))
    assert drifting.trend is not None
    assert drifting.trend > 0.7
    assert drifting.trend_p is not None
    assert drifting.trend_p < 0.01
    short = summarise([1.0, 2.0, 3.0, 4.0])
    assert short.trend == pytest.approx(1.0)
    assert short.trend_p == pytest.approx(2.0 / 24.0)  # both perfect orders of 24


@pytest.mark.parametrize(
    "values",
    [
        [],
        [1.0],
        [1.0, 2.0],
        [3.0, 3.0, 3.0],
        [0.1] * 7,
        [0.1 + 1e-17 * i for i in range(12)],
        [1.0, 1.0, 1.0, 2.0],
        [math.nan, math.inf],
        [math.nan, 1.0, 2.0, 3.0, 4.0, 5.0],
    ],
)
def test_small_and_odd_lots_say_what_cannot_be_said(values: list[float]) -> None:
    lot = summarise(values, Limit(0.0, 5.0), U=[0.1] * len(values))
    finite = [v for v in values if math.isfinite(v)]
    assert lot.n == len(finite)
    assert lot.missing == len(values) - len(finite)
    assert lot.notes
    if len(finite) < 2 or len(set(finite)) == 1:
        assert lot.ppk is None
        assert lot.tolerance_two_sided is None
        assert lot.normality_p is None
        assert lot.trend is None
    for number in (lot.mean, lot.sd, lot.ppk, lot.normality_p, lot.trend_p):
        assert number is None or math.isfinite(number)


def test_outliers_are_named_by_their_place_in_the_lot_as_given() -> None:
    values = [math.nan, *np.linspace(-1.0, 1.0, 20), 30.0]
    assert summarise(values).outliers == (21,)


def test_uncertainties_must_belong_to_the_values() -> None:
    with pytest.raises(ValueError, match="2 uncertainties for 3 values"):
        summarise([1.0, 2.0, 3.0], U=[0.1, 0.1])
