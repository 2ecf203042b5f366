"""Lot statistics of one measurand: spread, capability, tolerance intervals, outliers, trend.

Everything assumes a normal lot; the Shapiro-Wilk probability says how far that can be trusted. What
a lot is too small to say is None, never a guess.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from benchkit.metrology.judgement import Limit

Array = NDArray[np.float64]


@dataclass(frozen=True)
class LotStatistics:
    """Statistics of one measurand over a lot; None where the lot is too small or has no spread.

    Attributes:
        n, mean, sd, minimum, maximum: of the finite values; ``missing`` counts the others.
        ppk: distance of the mean to the nearest limit in units of 3 sd; ``ppk_low`` and
            ``ppk_high`` bound its two-sided confidence interval.
        tolerance_lower, tolerance_upper: one-sided limits: with the stated confidence at least the
            stated share of the population lies above, or below.
        tolerance_two_sided: interval that holds the share, with the confidence.
        normality_p: Shapiro-Wilk; small means not normal. None below 3 values.
        outliers: positions, in the values as given, of generalised ESD outliers, most extreme
            first.
        trend: Spearman's rank correlation with the order; ``trend_p`` its two-sided probability.
        mean_U: root-mean-square of the expanded uncertainties of the values, where given.
        notes: what cannot be said, in words.
    """

    n: int
    missing: int
    mean: float | None
    sd: float | None
    minimum: float | None
    maximum: float | None
    ppk: float | None
    ppk_low: float | None
    ppk_high: float | None
    tolerance_lower: float | None
    tolerance_upper: float | None
    tolerance_two_sided: tuple[float, float] | None
    normality_p: float | None
    outliers: tuple[int, ...]
    trend: float | None
    trend_p: float | None
    mean_U: float | None
    notes: tuple[str, ...]


def summarise(
    values: Sequence[float],
    limit: Limit | None = None,
    *,
    U: Sequence[float] | None = None,
    content: float = 0.95,
    confidence: float = 0.95,
    outlier_alpha: float = 0.05,
) -> LotStatistics:
    """Statistics of one measurand, values in the order in which the boards were measured.

    Args:
        values: one a board; those not finite (nothing measured) are counted and left out.
        limit: for the capability index; without it there is none.
        U: expanded uncertainties, one a value; reported beside the spread, which contains them.
        content: share of the population that the tolerance intervals hold.
        confidence: of the tolerance intervals and of the capability's interval.
        outlier_alpha: risk of calling one of a clean lot an outlier.
    """
    every = np.asarray(values, dtype=np.float64)
    finite = np.isfinite(every)
    x = every[finite]
    position = np.flatnonzero(finite)
    n = int(x.size)
    notes: list[str] = []
    if n < every.size:
        notes.append(f"{every.size - n} of {every.size} boards gave no value")
    mean = float(x.mean()) if n else None
    sd = float(x.std(ddof=1)) if n > 1 else None
    # Identical values leave a rounding residue for a standard deviation: that is no spread.
    spread = sd if sd is not None and np.ptp(x) > 1e-12 * np.max(np.abs(x)) else None
    if sd is not None and spread is None:
        sd = 0.0
        notes.append("all values are identical: no spread to judge capability or tolerance by")
    if n < 2:
        notes.append("a spread needs two boards or more")

    ppk, ppk_low, ppk_high = None, None, None
    lower = upper = two_sided = None
    if mean is not None and spread is not None:
        k_one = tolerance_factor_one_sided(n, content, confidence)
        k_two = tolerance_factor_two_sided(n, content, confidence)
        lower, upper = mean - k_one * spread, mean + k_one * spread
        two_sided = (mean - k_two * spread, mean + k_two * spread)
        if limit is not None:
            ppk, ppk_low, ppk_high = _capability(mean, spread, n, limit, confidence)
    normality, trend, trend_p = None, None, None
    outliers: tuple[int, ...] = ()
    if spread is not None and n >= 3:
        from scipy.stats import shapiro

        normality = float(shapiro(x).pvalue) if n <= 5000 else None
        outliers = tuple(int(position[i]) for i in generalised_esd(x, alpha=outlier_alpha))
    if 2 <= n < 8:
        notes.append(f"{n} boards are too few to see whether the lot is normal")
    if spread is not None and n >= 4:
        trend, trend_p = _trend(x, position)
    elif n:
        notes.append("a trend needs four different boards or more")
    return LotStatistics(
        n=n,
        missing=int(every.size - n),
        mean=mean,
        sd=sd,
        minimum=float(x.min()) if n else None,
        maximum=float(x.max()) if n else None,
        ppk=ppk,
        ppk_low=ppk_low,
        ppk_high=ppk_high,
        tolerance_lower=lower,
        tolerance_upper=upper,
        tolerance_two_sided=two_sided,
        normality_p=normality,
        outliers=outliers,
        trend=trend,
        trend_p=trend_p,
        mean_U=_rms(U, finite),
        notes=tuple(notes),
    )


@lru_cache(maxsize=256)
def tolerance_factor_one_sided(n: int, content: float, confidence: float) -> float:
    """Exact factor k of a one-sided normal tolerance limit, mean + k sd (ISO 16269-6:2014).

    A quantile of the noncentral t distribution; n >= 2.
    """
    from scipy.special import ndtri
    from scipy.stats import nct

    root = math.sqrt(n)
    return float(nct.ppf(confidence, n - 1, root * float(ndtri(content)))) / root


@lru_cache(maxsize=256)
def tolerance_factor_two_sided(n: int, content: float, confidence: float) -> float:
    """Exact factor k of a two-sided normal tolerance interval, mean +/- k sd; n >= 2.

    From the definition (ISO 16269-6:2014, annex F; Odeh 1978): the probability over mean and sd
    that the interval holds ``content`` is ``confidence``. For a mean that is off by z/sqrt(n) the
    interval must reach r(z) standard deviations to each side, Phi(z/sqrt(n) + r) -
    Phi(z/sqrt(n) - r) = content, so k solves
    E_z[ P(chi2_(n-1) > (n-1) r(z)^2 / k^2) ] = confidence.
    """
    from scipy.optimize import brentq
    from scipy.special import chdtrc, ndtr

    nodes, weights = np.polynomial.legendre.leggauss(96)
    z = 4.5 * (nodes + 1.0)  # 0 to 9, the law is symmetric
    weight = 2.0 * 4.5 * weights * np.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    off = z / math.sqrt(n)
    low, high = np.zeros_like(off), off + 10.0
    for _ in range(60):
        r = 0.5 * (low + high)
        enough = ndtr(off + r) - ndtr(off - r) > content
        low, high = np.where(enough, low, r), np.where(enough, r, high)
    r = 0.5 * (low + high)

    def missed(log_k: float) -> float:
        reached = chdtrc(n - 1, (n - 1) * (r / math.exp(log_k)) ** 2)
        return float(weight @ reached) - confidence

    return math.exp(brentq(missed, math.log(0.1), math.log(1e5), xtol=1e-12))


def generalised_esd(values: ArrayLike, alpha: float = 0.05, most: int | None = None) -> list[int]:
    """Outliers by Rosner's generalised extreme studentised deviate test (Technometrics 25, 1983).

    Args:
        values: (n,) of a normal lot with a few strangers.
        alpha: risk of calling any of a clean lot an outlier.
        most: how many to look for; a fifth of the lot and no more than ten by default. Fewer than
            three values, or a lot that would be left without spread, end the search.

    Returns:
        positions of the outliers, most extreme first. The critical values are accurate for n >= 15
        (NIST/SEMATECH handbook 1.3.5.17.3) and err on either side below.
    """
    from scipy.special import stdtrit

    x = np.asarray(values, dtype=np.float64)
    n = x.size
    limit = min(10, max(1, n // 5)) if most is None else most
    left = list(range(n))
    found: list[int] = []
    count = 0
    for i in range(1, min(limit, n - 2) + 1):
        rest = x[left]
        sd = float(rest.std(ddof=1))
        if np.ptp(rest) == 0.0 or sd == 0.0:
            break
        deviation = np.abs(rest - rest.mean())
        worst = int(np.argmax(deviation))
        free = n - i - 1
        t = float(stdtrit(free, 1.0 - alpha / (2.0 * (n - i + 1))))
        critical = (n - i) * t / math.sqrt((free + t * t) * (n - i + 1))
        found.append(left.pop(worst))
        if float(deviation[worst]) / sd > critical:
            count = i
    return found[:count]


def _capability(
    mean: float, sd: float, n: int, limit: Limit, confidence: float
) -> tuple[float, float | None, float | None]:
    """Ppk and its interval: ppk +/- z sqrt(1/(9 n) + ppk^2/(2 (n - 1))).

    Bissell 1990, Applied Statistics 39, 331; an approximation that is poor below about 10 boards,
    so below that there is no interval.
    """
    from scipy.special import ndtri

    ppk = limit.margin(mean) / (3.0 * sd)
    if n < 10:
        return ppk, None, None
    half = float(ndtri(0.5 + confidence / 2.0)) * math.sqrt(
        1.0 / (9.0 * n) + ppk * ppk / (2.0 * (n - 1))
    )
    return ppk, ppk - half, ppk + half


def _trend(x: Array, order: NDArray[np.intp]) -> tuple[float, float]:
    """Spearman's rank correlation with the order, and its two-sided probability.

    Below ten boards by permutation (all of them, or 5000 drawn from a fixed seed), from ten on by
    Student's t; a drift so steady that rank and order agree everywhere is still given a p above 0.
    """
    from scipy.stats import permutation_test, rankdata, spearmanr

    result = spearmanr(order, x)
    rho, p = float(result.statistic), float(result.pvalue)
    if x.size < 10:
        place = order - order.mean()
        tested = permutation_test(
            (rankdata(x),),
            lambda ranks, axis: np.sum(place * ranks, axis=axis),
            permutation_type="pairings",
            vectorized=True,
            n_resamples=5000,
            rng=1,
        )
        p = float(tested.pvalue)
    return rho, p


def _rms(U: Sequence[float] | None, finite: NDArray[np.bool_]) -> float | None:
    if U is None:
        return None
    if len(U) != finite.size:
        raise ValueError(f"lot: {len(U)} uncertainties for {finite.size} values")
    kept = np.asarray(U, dtype=np.float64)[finite]
    return float(np.sqrt(np.mean(kept**2))) if kept.size else None
