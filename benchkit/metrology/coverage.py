"""The coverage factor of a sum of rectangular, normal and Student errors.

JCGM 101:2008 finds the coverage interval of the actual sum by random draws. The sum is symmetric
here, so it can be had exactly and deterministically instead, from its characteristic function
(Gil-Pelaez 1951, Biometrika 38, 481)::

    P(|X| < x) = (2/pi) integral_0^inf phi(t) sin(x t)/t dt
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache, lru_cache
from statistics import NormalDist

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# Components below this share of the whole change k by less than 1e-6 and only slow the integral.
_NEGLIGIBLE = 1e-3
# Sums of one or two rectangulars have a characteristic function that dies out slowly. A normal
# error of this share of the whole is added to cut it off; it changes k95 by less than 1e-4.
_SMOOTHING = 0.005
# A Student with this many degrees of freedom or more is treated as normal of the same variance.
_ALMOST_NORMAL = 2000.0


@cache
def nominal_factor(coverage: float) -> float:
    """Two-sided factor of the normal distribution: 1.960 at 95 %."""
    return NormalDist().inv_cdf(0.5 + coverage / 2.0)


@lru_cache(maxsize=4096)
def coverage_factor(
    rectangular: tuple[float, ...], normal: tuple[tuple[float, float], ...], coverage: float
) -> float:
    """Half-width of the symmetric coverage interval of a sum of independent errors.

    Args:
        rectangular: standard uncertainties of the rectangular components.
        normal: pairs of standard uncertainty and degrees of freedom; a finite dof makes the
            component a Student of that *scale* (JCGM 101, 6.4.9), so its variance is larger.
        coverage: probability, between 0 and 1.

    The squares of all standard uncertainties must sum to 1; the result then is k. It agrees with
    the exact distribution to about 1e-4.
    """
    limits = [math.sqrt(3.0) * u for u in rectangular if u > _NEGLIGIBLE]
    students = [(u, v) for u, v in normal if u > _NEGLIGIBLE and v < _ALMOST_NORMAL]
    sigma = math.sqrt(
        sum(u * u for u in rectangular if u <= _NEGLIGIBLE)
        + sum(
            u * u * (v / (v - 2.0) if 2.0 < v < math.inf else 1.0)
            for u, v in normal
            if not (u > _NEGLIGIBLE and v < _ALMOST_NORMAL)
        )
    )
    if not limits and not students:
        return sigma * nominal_factor(coverage)
    if len(limits) == 1 and not students and sigma <= _NEGLIGIBLE:
        return limits[0] * coverage
    if len(students) == 1 and not limits and sigma <= _NEGLIGIBLE:
        return students[0][0] * _student_factor(students[0][1], coverage)
    return _solve(limits, sigma, students, coverage)


def _student_factor(dof: float, coverage: float) -> float:
    from scipy.special import stdtrit

    return float(stdtrit(dof, 0.5 + coverage / 2.0))


def _solve(
    limits: Sequence[float], sigma: float, students: Sequence[tuple[float, float]], coverage: float
) -> float:
    """Root of P(|X| < x) = coverage by Newton steps kept inside a bracket."""
    widest = (
        sum(limits)
        + sigma * nominal_factor(0.5 + coverage / 2.0)
        + sum(u * _student_factor(v, coverage) for u, v in students)
    )
    # With a Student in the sum the tail of phi is exponential, with a normal it is Gaussian.
    smooth = math.hypot(sigma, _SMOOTHING)
    reach = _reach(limits, smooth, students)
    # One 16-point panel resolves about 12 rad of phase; at least 8 panels for the bend near zero.
    panels = max(8, math.ceil(reach * (min(widest, 40.0) + sum(limits)) / 8.0))
    t, weight = _nodes(panels)
    t = reach * t
    phi = np.exp(-0.5 * (smooth * t) ** 2)
    for a in limits:
        phi *= np.sinc(a * t / math.pi)
    for u, v in students:
        phi *= _student_characteristic(u * t, v)
    density = (2.0 / math.pi) * reach * weight * phi
    cumulative = density / t

    low, high = 0.0, widest * 1.01 + 5.0 * _SMOOTHING
    x = min(max(nominal_factor(coverage), 0.5 * high if high < 2.0 else 0.0), high)
    for _ in range(60):
        miss = float(cumulative @ np.sin(x * t)) - coverage
        if abs(miss) < 1e-9:
            break
        low, high = (low, x) if miss > 0.0 else (x, high)
        slope = float(density @ np.cos(x * t))
        step = x - miss / slope if slope > 0.0 else math.nan
        x = step if low < step < high else 0.5 * (low + high)
        if high - low < 1e-9:
            break
    return x


def _reach(limits: Sequence[float], sigma: float, students: Sequence[tuple[float, float]]) -> float:
    """The t beyond which the characteristic function no longer matters (below 1e-7)."""
    t = 1.0
    while t < 2000.0:
        log_bound = -0.5 * (sigma * t) ** 2 - sum(math.log(max(1.0, a * t)) for a in limits)
        # |phi| of a Student is below exp(-z) (1 + z + ...) with z = sqrt(v) u t, and is never far
        # below the Gaussian of the same scale; half the smaller exponent is a safe bound.
        log_bound -= sum(
            0.5 * min(0.5 * (u * t) ** 2, max(0.0, math.sqrt(v) * u * t - 1.0)) for u, v in students
        )
        if log_bound < -16.0:
            break
        t *= 1.15
    return t


@lru_cache(maxsize=64)
def _nodes(panels: int) -> tuple[Array, Array]:
    """Composite Gauss-Legendre nodes on (0, 1), squared so that they crowd towards zero.

    The characteristic function of a Student of few degrees of freedom has a corner at zero.
    """
    nodes, weights = np.polynomial.legendre.leggauss(16)
    s = ((np.arange(panels)[:, None] + 0.5 * (nodes + 1.0)) / panels).ravel()
    w = np.tile(0.5 * weights / panels, panels)
    return s * s, 2.0 * s * w


def _student_characteristic(t: Array, dof: float) -> Array:
    """E[cos(t T)] for a Student T (from memory; Hurst 1995): a modified Bessel function K."""
    from scipy.special import gammaln, kve

    z = math.sqrt(dof) * np.maximum(np.abs(t), 1e-12)
    half = 0.5 * dof
    bessel = kve(half, z)
    out = np.ones_like(z)
    # Close to zero K overflows for many degrees of freedom; there phi is 1 - t^2 v/(2(v - 2)).
    usable = np.isfinite(bessel) & (bessel > 0.0)
    out[usable] = np.exp(
        np.log(bessel[usable])
        - z[usable]
        + half * np.log(z[usable])
        - float(gammaln(half))
        - (half - 1.0) * math.log(2.0)
    )
    out[bessel == 0.0] = 0.0
    if dof > 2.0:
        near = ~np.isfinite(bessel)
        out[near] = np.exp(-0.5 * t[near] ** 2 * dof / (dof - 2.0))
    return np.minimum(out, 1.0)
