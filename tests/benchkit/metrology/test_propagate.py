import math

import numpy as np
import pytest
import uncertainties
from numpy.typing import NDArray
from uncertainties import umath

from benchkit.metrology import monte_carlo, propagate

Array = NDArray[np.float64]

# JCGM 100:2008, H.2: five simultaneous readings of voltage, current and phase.
V = [5.007, 4.994, 5.005, 4.990, 4.999]
I = [19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3]  # noqa: E741
PHI = [1.0456, 1.0438, 1.0468, 1.0428, 1.0433]


def impedance(x: Array) -> Array:
    v, i, phi = x
    return np.array([v / i * np.cos(phi), v / i * np.sin(phi), v / i])


def h2_inputs() -> tuple[Array, Array]:
    readings = np.array([V, I, PHI])
    return readings.mean(axis=1), np.asarray(np.cov(readings) / 5.0)


def test_resistance_and_reactance_of_jcgm_100_h2() -> None:
    # JCGM 100:2008, table H.4: values, uncertainties and correlations.
    y, cov = propagate(impedance, *h2_inputs())
    u = np.sqrt(cov.diagonal())
    assert y == pytest.approx([127.732, 219.847, 254.260], abs=6e-4)
    assert u == pytest.approx([0.071, 0.296, 0.236], abs=6e-4)
    assert cov[0, 1] / u[0] / u[1] == pytest.approx(-0.588, abs=6e-4)
    assert cov[0, 2] / u[0] / u[2] == pytest.approx(-0.485, abs=6e-4)
    assert cov[1, 2] / u[1] / u[2] == pytest.approx(0.993, abs=6e-4)


def test_draws_agree_with_the_linear_law_where_the_function_is_nearly_straight() -> None:
    # JCGM 101:2008, clause 8: validation of the linear law by draws, within half a last digit.
    y, cov = propagate(impedance, *h2_inputs())
    drawn = monte_carlo(impedance, *h2_inputs(), n=200_000, seed=3)
    u = np.sqrt(cov.diagonal())
    assert drawn.mean == pytest.approx(y, abs=0.01 * float(u.min()) + 1e-3)
    assert drawn.u == pytest.approx(u, rel=0.01)
    assert drawn.high - drawn.low == pytest.approx(2.0 * 1.96 * u, rel=0.015)
    assert drawn.covariance == pytest.approx(cov, rel=0.05)


def test_the_same_derivatives_as_an_independent_propagator() -> None:
    # uncertainties 3.2 (BSD): exact derivatives by the chain rule.
    x, u = np.array([12.3, -0.4, 1e-6, 300.0]), np.array([0.2, 0.03, 2e-8, 1.5])
    a, b, c, d = (uncertainties.ufloat(v, s) for v, s in zip(x, u, strict=True))
    outputs = [
        a * umath.exp(b) + c * 1e6,
        umath.log(d) / a - umath.sin(b),
        umath.sqrt(d * d + a * a) * c,
    ]

    def f(q: Array) -> Array:
        p, r, s, t = q
        return np.array(
            [
                p * np.exp(r) + s * 1e6,
                np.log(t) / p - np.sin(r),
                np.sqrt(t * t + p * p) * s,
            ]
        )

    y, cov = propagate(f, x, u)
    assert y == pytest.approx([o.nominal_value for o in outputs])
    expected = np.array(uncertainties.covariance_matrix(outputs))
    assert cov == pytest.approx(expected, rel=1e-6, abs=1e-12 * float(np.abs(expected).max()))


def test_a_curved_law_is_seen_by_draws_and_missed_by_the_linear_one() -> None:
    # JCGM 101:2008, 9.4 (comparison loss): x^2 at 0 has no slope there, but a mean of u^2.
    y, cov = propagate(lambda x: x[0] ** 2, [0.0], [0.005])
    drawn = monte_carlo(lambda x: x[0] ** 2, [0.0], [0.005], n=100_000, seed=1)
    assert (y[0], math.sqrt(cov[0, 0])) == pytest.approx((0.0, 0.0), abs=1e-9)
    assert drawn.mean[0] == pytest.approx(25e-6, rel=0.02)
    assert drawn.u[0] == pytest.approx(25e-6 * math.sqrt(2.0), rel=0.03)
    assert drawn.low[0] >= 0.0


def test_draws_are_reproducible_and_take_a_singular_covariance() -> None:
    full = np.array([[1.0, 1.0], [1.0, 1.0]])
    one = monte_carlo(lambda x: x[0] - x[1], [5.0, 2.0], full, n=1000, seed=9)
    again = monte_carlo(lambda x: x[0] - x[1], [5.0, 2.0], full, n=1000, seed=9)
    assert one.mean[0] == again.mean[0] == pytest.approx(3.0)
    assert one.u[0] == pytest.approx(0.0, abs=1e-6)


def test_shapes_that_do_not_fit_are_refused() -> None:
    with pytest.raises(ValueError, match="covariance"):
        propagate(lambda x: x, [1.0, 2.0], [0.1])
    with pytest.raises(ValueError, match="draws"):
        monte_carlo(lambda x: x, [1.0], [0.1], n=10, seed=1)
