import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchkit.metrology import Budget, Component, covariance

C = Component


def k(*components: Component, coverage: float = 0.95) -> float:
    return Budget(components).expanded(coverage).k


def test_coverage_factors_of_pure_distributions() -> None:
    # JCGM 100:2008: 4.3.7 and table G.1 (rectangular), table G.2 (Student).
    assert k(C("a", 2.0, "rectangular")) == pytest.approx(1.6454, abs=1e-4)
    assert k(C("a", 0.1), C("b", -0.3)) == pytest.approx(1.95996, abs=1e-5)
    assert k(C("a", 1.0, dof=4)) == pytest.approx(2.776, abs=1e-3)
    assert k(C("a", 1.0, dof=4), C("b", 0.05, "rectangular")) == pytest.approx(2.776, abs=4e-3)
    assert k(C("a", 1.0, dof=1)) == pytest.approx(12.706, abs=2e-3)
    assert k(C("a", 1.0), coverage=0.99) == pytest.approx(2.5758, abs=1e-4)


def test_two_equal_rectangulars_make_the_triangle_of_jcgm_100() -> None:
    # JCGM 100:2008, 4.3.9 and closed form: P(|X| < x) = 1 - (1 - x/2a)^2.
    expected = 2.0 * (1.0 - math.sqrt(0.05)) * math.sqrt(3.0) / math.sqrt(2.0)
    assert k(C("a", 1.0, "rectangular"), C("b", 1.0, "rectangular")) == pytest.approx(
        expected, abs=2e-4
    )


def test_two_cauchy_errors_add_their_widths() -> None:
    # Closed form: the sum of two Cauchy variables is Cauchy with the sum of the scales.
    assert k(C("a", 1.0, dof=1), C("b", 1.0, dof=1)) == pytest.approx(
        12.7062 * math.sqrt(2.0), rel=1e-4
    )


def test_a_cauchy_and_a_normal_make_a_voigt_profile() -> None:
    from scipy.integrate import quad
    from scipy.special import voigt_profile

    budget = Budget([C("a", 1.0, dof=1), C("b", 1.0)])
    U = budget.expanded().U
    inside, _ = quad(lambda x: voigt_profile(x, 1.0, 1.0), -U, U)
    assert inside == pytest.approx(0.95, abs=1e-5)


@pytest.mark.parametrize("s", [0.02, 0.0625, 0.2, 0.5])
def test_a_rectangular_with_noise_by_direct_integration(s: float) -> None:
    from scipy.integrate import quad
    from scipy.special import ndtr

    a = math.sqrt(3.0)
    U = Budget([C("a", 1.0, "rectangular"), C("b", s)]).expanded().U
    inside, _ = quad(
        lambda r: (ndtr((U - r) / s) - ndtr((-U - r) / s)) / (2.0 * a),
        -a,
        a,
        points=[-U, U],
        limit=500,
    )
    assert inside == pytest.approx(0.95, abs=2e-5)


@pytest.mark.parametrize(
    "components",
    [
        [C("a", 1.0, "rectangular"), C("b", 0.01)],
        [C("a", 1.0, "rectangular"), C("b", 0.3, "rectangular"), C("c", 0.05)],
        [C("a", 1.0, "rectangular"), C("b", 0.5), C("c", 0.4, dof=5)],
        [C("a", 1.0, dof=2), C("b", 1.0, "rectangular")],
        [C("a", 1.0, dof=3), C("b", 0.5, dof=9), C("c", 0.2)],
        [C("a", 0.02, dof=1), C("b", 1.0, "rectangular")],
        [C(str(i), 1.0 / (1 + i), "rectangular") for i in range(9)],
    ],
)
def test_coverage_factor_agrees_with_draws(components: list[Component]) -> None:
    # JCGM 101:2008: the interval of the sum by random draws, an independent method.
    rng = np.random.default_rng(20)
    n = 400_000
    total = np.zeros(n)
    for c in components:
        if c.distribution == "rectangular":
            total += rng.uniform(-1.0, 1.0, n) * c.u * math.sqrt(3.0)
        else:
            normal = rng.standard_normal(n)
            total += c.u * (normal if math.isinf(c.dof) else rng.standard_t(c.dof, n))
    inside = np.mean(np.abs(total) < Budget(components).expanded().U)
    # Four standard deviations of a counted share of 0.95.
    assert inside == pytest.approx(0.95, abs=4.0 * math.sqrt(0.95 * 0.05 / n) + 2e-4)


@settings(deadline=None, max_examples=60)
@given(
    us=st.lists(st.floats(1e-3, 1e3), min_size=1, max_size=6),
    rectangular=st.lists(st.booleans(), min_size=6, max_size=6),
    scale=st.floats(1e-6, 1e6),
)
def test_expanded_uncertainty_scales_and_stays_in_bounds(
    us: list[float], rectangular: list[bool], scale: float
) -> None:
    budget = Budget(
        C(str(i), u, "rectangular" if flat else "normal")
        for i, (u, flat) in enumerate(zip(us, rectangular, strict=False))
    )
    one = budget.expanded()
    # Between one rectangular (a little normal noise adds to u before it widens the interval, hence
    # slightly less) and a normal.
    assert 1.640 <= one.k <= 1.961
    many = Budget.linear([(scale, budget)]).expanded()
    assert many.u * many.k == pytest.approx(scale * one.u * one.k, rel=1e-3)
    assert one.U < budget.expanded(0.99).U


def test_end_gauge_example_of_jcgm_100_h1() -> None:
    # JCGM 100:2008, H.1 (from memory): u_c = 32 nm, nu_eff = 16.7, k = 2.92, U99 = 93 nm. The
    # components with their degrees of freedom, in nm.
    budget = Budget(
        [
            C("standard", 25.0, dof=18),
            C("repeated comparisons", 5.8, dof=24),
            C("comparator random", 3.9, dof=5),
            C("comparator systematic", 6.7, dof=8),
            C("expansion difference", 2.9, dof=50),
            C("temperature difference", 16.6, dof=2),
        ]
    )
    assert budget.u == pytest.approx(32.0, abs=0.5)
    assert budget.dof == pytest.approx(16.7, abs=0.7)
    # The example takes Student of nu_eff; the sum of the actual distributions is a little wider,
    # because two degrees of freedom have heavy tails.
    assert 93.0 <= budget.expanded(0.99).U < 190.0
    from scipy.special import stdtrit

    assert stdtrit(math.floor(budget.dof), 0.995) == pytest.approx(2.92, abs=0.01)


def test_one_source_that_arrives_by_two_ways_adds_with_its_sign() -> None:
    budget = Budget([C("meter gain", 3.0, "rectangular"), C("meter gain", -1.0, "rectangular")])
    assert budget.components == (C("meter gain", 2.0, "rectangular"),)
    with pytest.raises(ValueError, match="meter gain"):
        Budget([C("meter gain", 3.0, "rectangular"), C("meter gain", 1.0)])


def test_results_are_correlated_through_shared_names() -> None:
    a = Budget([C("gain", 3.0), C("noise a", 4.0)])
    b = Budget([C("gain", -2.0), C("noise b", 1.0)])
    assert covariance(a, b) == -6.0
    assert covariance(a, a) == pytest.approx(a.u**2)
    difference = Budget.linear([(1.0, a), (-1.0, b)])
    assert difference.u**2 == pytest.approx(a.u**2 + b.u**2 - 2.0 * covariance(a, b))


def test_budgets_of_nothing_and_of_the_unknown() -> None:
    nothing = Budget().expanded()
    assert nothing.U == 0.0
    assert nothing.k == pytest.approx(1.96, abs=1e-3)
    assert Budget([C("a", 0.0)]).expanded().U == 0.0
    assert math.isinf(Budget([C("a", math.inf), C("b", 1.0)]).expanded().U)
    assert math.isnan(Budget([C("a", math.nan)]).expanded().U)


def test_components_that_mean_nothing_are_refused() -> None:
    with pytest.raises(ValueError, match="dof"):
        C("a", 1.0, dof=0.5)
    with pytest.raises(ValueError, match="rectangular"):
        C("a", 1.0, "rectangular", dof=9)
    with pytest.raises(ValueError, match="coverage"):
        Budget([C("a", 1.0)]).expanded(1.0)
