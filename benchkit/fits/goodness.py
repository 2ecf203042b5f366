"""Does a fitted law describe the data? Size of the residuals, and pattern in their signs."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

# One good fit in a thousand may be called bad by each test: a lot of boards has many fits.
FALSE_ALARM = 0.001


def chi_square_p(chi2: float, dof: int) -> float:
    """Probability of a chi-square this large or larger from noise alone; NaN without dof."""
    if dof < 1:
        return math.nan
    from scipy.special import chdtrc

    return float(chdtrc(dof, chi2))


def runs_p(residuals: NDArray[np.float64]) -> float:
    """Probability of this few runs of equal signs, or fewer, from noise alone.

    Exact Wald-Wolfowitz distribution (Swed and Eisenhart 1943), one-sided: a wrong law leaves long
    runs. Zero residuals are left out. NaN when all have one sign or fewer than six remain.
    """
    signs = np.sign(residuals[residuals != 0.0])
    plus, minus = int(np.sum(signs > 0)), int(np.sum(signs < 0))
    if plus + minus < 6 or plus == 0 or minus == 0:
        return math.nan
    runs = 1 + int(np.sum(signs[1:] != signs[:-1]))
    if plus + minus > 60:
        # Normal approximation with continuity correction; exact counting would be slow.
        n = plus + minus
        mean = 1.0 + 2.0 * plus * minus / n
        variance = (mean - 1.0) * (mean - 2.0) / (n - 1.0)
        return 0.5 * math.erfc(-(runs + 0.5 - mean) / math.sqrt(2.0 * variance))
    ways = 0
    for r in range(2, runs + 1):
        k = r // 2
        if r % 2 == 0:
            ways += 2 * math.comb(plus - 1, k - 1) * math.comb(minus - 1, k - 1)
        else:
            ways += math.comb(plus - 1, k) * math.comb(minus - 1, k - 1)
            ways += math.comb(plus - 1, k - 1) * math.comb(minus - 1, k)
    return ways / math.comb(plus + minus, plus)


def judge_fit(
    residuals: NDArray[np.float64], chi2: float, dof: int, *, noise_known: bool
) -> tuple[bool, str]:
    """Whether the residuals look like noise, and why not in words.

    Args:
        residuals: in units of the noise, in the order of the sweep.
        chi2: sum of their squares.
        dof: points minus parameters.
        noise_known: False when the noise was itself estimated from these residuals; then their
            size says nothing and only the pattern of signs is tested.
    """
    if dof < 1:
        return True, "as many parameters as points: nothing is left to tell whether the law holds"
    reasons = []
    if noise_known and chi_square_p(chi2, dof) < FALSE_ALARM:
        reasons.append(f"residuals are {math.sqrt(chi2 / dof):.1f} times the noise of the readings")
    # A pattern far below the declared noise harms nobody.
    if (not noise_known or chi2 > 0.01 * dof) and runs_p(residuals) < FALSE_ALARM:
        reasons.append("residuals keep one sign over long stretches: the law has the wrong shape")
    return not reasons, "; ".join(reasons)
