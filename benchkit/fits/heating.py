"""Heating curves: the rise of a case over ambient after a step of constant power.

The final rise and its uncertainty come from ``relaxation``, which does not pretend to know the
number of time constants. One and two exponentials are fitted beside it: their time constants are
what people speak of, and whether they agree on the final rise is worth knowing.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from benchkit.fits.exponentials import Settling, fit_settling
from benchkit.fits.relaxation import Relaxation, relax
from benchkit.metrology.budget import Budget, Component, Distribution

Array = NDArray[np.float64]

_LEAST_POINTS = 10


@dataclass(frozen=True)
class Heating:
    """A fitted heating curve.

    Attributes:
        usable: whether the data say where the curve ends; ``why`` not, in words.
        time_s, rise_K: (n,) the points used, ambient drift removed.
        ambient_C: ambient at the end of the run, smoothed.
        final_rise_K: expected rise for t to infinity; NaN when there are too few points.
        final_rise_budget: its uncertainty: noise and unresolved time constants, ambient, common.
        residuals: (n,) rise minus curve [K].
        noise_K: standard deviation of a reading, as given or as seen if that is larger.
        slowest_tau_s: longest time constant to expect, as given.
    """

    usable: bool
    why: str
    time_s: Array
    rise_K: Array
    ambient_C: float
    final_rise_K: float
    final_rise_budget: Budget
    residuals: Array
    noise_K: float
    slowest_tau_s: float
    relaxation: Relaxation | None = field(repr=False)

    def curve(self, t: ArrayLike) -> Array:
        """Rise [K] at times ``t`` [s], (n,)."""
        times = np.atleast_1d(np.asarray(t, dtype=np.float64))
        if self.relaxation is None:
            return np.full(times.shape, math.nan)
        return self.relaxation.curve(times)

    def curve_u(self, t: ArrayLike) -> Array:
        """Standard uncertainty of that curve [K], noise and unresolved time constants, (n,)."""
        times = np.atleast_1d(np.asarray(t, dtype=np.float64))
        if self.relaxation is None:
            return np.full(times.shape, math.nan)
        return self.relaxation.curve_u(times)

    def known_within(self, limit_K: float) -> bool:
        """Whether the final rise is known within ``limit_K`` at 95 %, so that the soak may end.

        U alone is not enough while a soak is watched: chance will make it small once, and a slow
        mode is unseen at first. So the run must also have lasted two of ``slowest_tau_s``, and the
        rise gained over its second half must be no more than twice the limit.
        """
        if not self.usable or self._run < 2.0 * self.slowest_tau_s:
            return False
        before, now = self.curve([0.5 * self._run, self._run])
        if abs(float(now - before)) > 2.0 * limit_K:
            return False
        return limit_K >= self.final_rise_budget.expanded().U

    @cached_property
    def one(self) -> Settling | None:
        """One exponential, fitted to the last four fifths of the run (fast modes are over then)."""
        late = self.time_s >= 0.2 * self._run
        return self._settling(late, 1)

    @cached_property
    def two(self) -> Settling | None:
        """Two exponentials, fitted to the whole run."""
        return self._settling(np.ones(self.time_s.shape, dtype=bool), 2)

    @property
    def best(self) -> Settling | None:
        """Two exponentials where they fit clearly better over the whole run, else one."""
        whole = self._settling(np.ones(self.time_s.shape, dtype=bool), 1)
        if whole is None or self.two is None or self.two.dof < 1:
            return whole
        # F-test at 1 % for two further parameters.
        from scipy.special import fdtrc

        f = (whole.chi2 - self.two.chi2) / 2.0 / (self.two.chi2 / self.two.dof)
        return self.two if fdtrc(2.0, self.two.dof, max(f, 0.0)) < 0.01 else whole

    @cached_property
    def taus(self) -> tuple[float, ...]:
        """Time constants [s] of the better of one and two exponentials, rising."""
        return () if self.best is None else tuple(float(tau) for tau in self.best.taus)

    @cached_property
    def covariance(self) -> Array:
        """Covariance of that fit: final rise [K], amplitudes [K], ln(tau); noise alone."""
        if self.best is None:
            return np.full((1, 1), math.nan)
        return self.best.covariance * self.noise_K**2

    @cached_property
    def one_and_two_agree(self) -> bool:
        """Whether one and two exponentials end within the 95 % uncertainty of the final rise."""
        if not self.usable or self.one is None or self.two is None:
            return False
        return abs(self.one.final - self.two.final) <= self.final_rise_budget.expanded().U

    @property
    def _run(self) -> float:
        return float(self.time_s[-1]) if self.time_s.size else 0.0

    def _settling(self, chosen: NDArray[np.bool_], terms: int) -> Settling | None:
        t = self.time_s[chosen]
        if t.size < _LEAST_POINTS - 2:
            return None
        return fit_settling(t, self.rise_K[chosen], terms, self._run / 100.0, 3.0 * self._run)


def fit_heating(
    time_s: ArrayLike,
    case_C: ArrayLike,
    ambient_C: ArrayLike,
    u_case: float,
    *,
    slowest_tau_s: float = 90.0,
    common: Mapping[str, float] | None = None,
    distributions: Mapping[str, Distribution] | None = None,
    label: str = "soak",
) -> Heating:
    """Fit the rise of a case after a constant-power step that starts at t = 0 from any rise.

    Args:
        time_s: (n,) since the step, rising, not negative.
        case_C, ambient_C: (n,), or one ambient.
        u_case: standard deviation of the noise of one case reading [K], above zero.
        slowest_tau_s: longest time constant to expect; no soak is ended before twice that. A part
            on a small board or clip-on heat sink stays below the default (common practice, no
            source); give more for a chassis.
        common: by error source, standard uncertainty [K] of the difference between the case and
            the ambient thermometer; it goes straight into the final rise.
        distributions: by error source, ``normal`` or ``rectangular``.
        label: of the soak, used in the names of budget components.

    Points that are not finite are left out. Too few or flat data give a result that says so.
    """
    t, case, ambient = (
        np.asarray(a, dtype=np.float64) for a in np.broadcast_arrays(time_s, case_C, ambient_C)
    )
    if t.ndim != 1:
        raise ValueError(f"{label}: times, case and ambient must be rows of equal length")
    if not (math.isfinite(u_case) and u_case > 0.0):
        raise ValueError(f"{label}: u_case = {u_case!r} must be a number of kelvins above zero")
    good = np.isfinite(t) & np.isfinite(case) & np.isfinite(ambient) & (t >= 0.0)
    t, case, ambient = t[good], case[good], ambient[good]
    if np.any(np.diff(t) < 0.0):
        raise ValueError(f"{label}: the times must rise")
    if t.size < _LEAST_POINTS or t[-1] <= 0.0:
        why = f"{t.size} points are too few: {_LEAST_POINTS} or more are needed"
        return _nothing(why, t, case - ambient, slowest_tau_s)

    smooth, drift_K_per_s, u_ambient = _smooth_ambient(t, ambient)
    rise = case - smooth
    relaxation = relax(t, rise, u_case)
    # A case follows ambient with its own lag, so under a steady drift the difference is off by
    # drift times mean time constant. How much of the lag applies (none where the sensor sees the
    # same air) is unknown: half is corrected, and half of it is the limit of error.
    half_lag = 0.5 * drift_K_per_s * relaxation.mean_tau
    components = [
        Component(f"{label}: noise and unresolved time constants", relaxation.u_final),
        Component(f"{label}: lag behind ambient drift", half_lag / math.sqrt(3.0), "rectangular"),
        Component(f"{label}: ambient reading", u_ambient),
    ]
    for source, u in (common or {}).items():
        if source not in (distributions or {}):
            raise ValueError(f"common error '{source}' has no entry in distributions")
        components.append(Component(source, u, (distributions or {})[source]))
    why = _why_not(t, rise, relaxation)
    return Heating(
        usable=not why,
        why=why,
        time_s=t,
        rise_K=rise,
        ambient_C=float(smooth[-1]),
        final_rise_K=relaxation.final + half_lag,
        final_rise_budget=Budget(components),
        residuals=rise - relaxation.curve(t),
        noise_K=relaxation.noise,
        slowest_tau_s=slowest_tau_s,
        relaxation=relaxation,
    )


def _smooth_ambient(t: Array, ambient: Array) -> tuple[Array, float, float]:
    """Ambient as a low polynomial in time, its mean drift [K/s], and what noise leaves in it [K].

    The raw reading is not subtracted: its noise, and draughts that the case is too slow to follow,
    would go into the rise.
    """
    if np.ptp(ambient) == 0.0:
        return ambient.copy(), 0.0, 0.0
    degree = 1 if t.size < 15 else 2
    x = 2.0 * t / t[-1] - 1.0
    basis = np.polynomial.legendre.legvander(x, degree)
    coefficients = np.linalg.lstsq(basis, ambient, rcond=None)[0]
    smooth = basis @ coefficients
    scatter = math.sqrt(float(np.sum((ambient - smooth) ** 2)) / (t.size - degree - 1))
    drift = float(smooth[-1] - smooth[0]) / float(t[-1] - t[0])
    # The variance of a polynomial of this degree at the end of its range.
    return smooth, drift, scatter * (degree + 1) / math.sqrt(t.size)


def _why_not(t: Array, rise: Array, relaxation: Relaxation) -> str:
    few = max(3, t.size // 10)
    change = abs(float(np.mean(rise[-few:]) - np.mean(rise[:few])))
    noise = relaxation.noise
    if change < 3.0 * noise * math.sqrt(2.0 / few) and abs(float(np.mean(rise))) < 3.0 * noise:
        return f"the case is not warmer than ambient by more than its noise of {noise:.2g} K"
    if relaxation.slow_share > 0.9:
        return (
            f"after {t[-1]:.0f} s the case still rises too steadily to say where it will end: "
            "the soak must last at least two of its slowest time constants"
        )
    return ""


def _nothing(why: str, t: Array, rise: Array, slowest_tau_s: float) -> Heating:
    return Heating(
        usable=False,
        why=why,
        time_s=t,
        rise_K=rise,
        ambient_C=math.nan,
        final_rise_K=math.nan,
        final_rise_budget=Budget([Component("unknown", math.inf)]),
        residuals=np.full(t.shape, math.nan),
        noise_K=math.nan,
        slowest_tau_s=slowest_tau_s,
        relaxation=None,
    )
