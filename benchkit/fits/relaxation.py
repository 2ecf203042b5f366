"""Where a settling curve will end, without knowing how many time constants it has.

A sum of one or two exponentials fits a heating curve well and still extrapolates it wrongly, since
the real thing has more of them. Here the curve is a sum over a fixed, close row of time constants,
with a prior on the amplitudes, so that everything the data leave open shows in the uncertainty. The
prior is linear and Gaussian, hence solved in closed form; the slowest time constant is averaged
over, weighted by the evidence of the data (Bayesian model averaging: Hoeting et al. 1999,
Statistical Science 14, 382). The prior's three constants were set by simulation of random thermal
networks (no source); the tests measure the coverage that they give.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_COUNT = 14  # time constants in the row
_SPREAD = 4.0  # standard deviation of an amplitude, over its prior mean
# Slowest time constant over the length of the run, and how likely each is before the data: a soak
# is meant to last a few of the slowest time constants, but may have been ended or looked at early.
_SLOWEST = np.array([0.25, 0.35, 0.5, 0.7, 1.0, 1.4, 2.0])
_PRIOR = 0.5 ** np.arange(_SLOWEST.size)


@dataclass(frozen=True)
class Relaxation:
    """Where a curve settles.

    Attributes:
        final: expected final value; u_final: its standard uncertainty, model included.
        mean_tau: time constants averaged over their amplitudes, in the unit of t.
        slow_share: probability that the slowest time constant is longer than half the run.
        noise: standard deviation of the readings, as given or as seen if that is larger.
    """

    final: float
    u_final: float
    mean_tau: float
    slow_share: float
    noise: float
    weights: Array
    taus: Array
    means: Array
    covariances: Array

    def curve(self, t: Array) -> Array:
        """Expected curve at ``t``, (n,)."""
        return np.asarray(np.einsum("m,mnk,mk->n", self.weights, self._basis(t), self.means))

    def curve_u(self, t: Array) -> Array:
        """Standard uncertainty of that curve at ``t``, (n,), model included."""
        basis = self._basis(t)
        each = np.einsum("mnk,mk->mn", basis, self.means)
        spread = each - self.weights @ each
        variance = np.einsum("mnk,mkl,mnl->mn", basis, self.covariances, basis) + spread**2
        return np.asarray(np.sqrt(self.weights @ variance))

    def _basis(self, t: Array) -> Array:
        return _bases(np.asarray(t, dtype=np.float64), self.taus)


def relax(t: Array, y: Array, noise: float) -> Relaxation:
    """Final value of y(t) for t to infinity.

    Args:
        t: (n,) rising times, not negative, n >= 8.
        y: (n,) readings with independent noise.
        noise: standard deviation of the noise, above zero.
    """
    first = _average(t, y, noise)
    # The best of the models has spent about five parameters; a larger scatter than declared counts.
    best = int(np.argmax(first.weights))
    residuals = y - first._basis(t)[best] @ first.means[best]
    seen = float(np.sqrt(residuals @ residuals / max(1, t.size - 5)))
    return first if seen <= noise else _average(t, y, seen)


def _average(t: Array, y: Array, noise: float) -> Relaxation:
    run = float(t[-1])
    # Faster than this a mode is over before the first reading, or is seen in too few to matter.
    fastest = max(float(t[0]) / 2.0, run / 150.0)
    steps = np.linspace(0.0, 1.0, _COUNT)
    taus = fastest * (_SLOWEST[:, None] * run / fastest) ** steps
    height = max(abs(float(np.median(y[-max(3, y.size // 10) :])) - float(y[0])), 4.0 * noise)
    sign = 1.0 if np.median(y[-max(3, y.size // 10) :]) >= y[0] else -1.0

    share = height / _COUNT
    prior_mean = np.concatenate([[0.0], np.full(_COUNT, sign * share)])
    prior_sd = np.concatenate(
        [[100.0 * height + abs(float(y[0]))], np.full(_COUNT, _SPREAD * share)]
    )
    basis = _bases(t, taus)
    start = y - basis @ prior_mean
    scaled = basis / noise
    precision = scaled.transpose(0, 2, 1) @ scaled + np.diag(prior_sd**-2)
    moment = np.einsum("mnk,mn->mk", scaled, start / noise, optimize=True)
    covariances: Array = np.asarray(np.linalg.inv(precision), dtype=np.float64)
    shift = np.einsum("mkl,ml->mk", covariances, moment)
    evidence = (
        -0.5 * np.sum((start / noise) ** 2, axis=1)
        + 0.5 * np.sum(shift * moment, axis=1)
        - 0.5 * np.linalg.slogdet(precision)[1]
        + np.log(_PRIOR)
    )
    weights = np.exp(evidence - evidence.max())
    weights /= weights.sum()

    means = prior_mean + shift
    each = means.sum(axis=1)
    final = float(weights @ each)
    variance = covariances.sum(axis=(1, 2)) + (each - final) ** 2
    amplitudes = means[:, 1:]
    mean_taus = np.sum(amplitudes * taus, axis=1) / np.where(
        np.abs(amplitudes.sum(axis=1)) > noise, amplitudes.sum(axis=1), sign * height
    )
    return Relaxation(
        final=final,
        u_final=float(np.sqrt(weights @ variance)),
        mean_tau=float(max(0.0, weights @ mean_taus)),
        slow_share=float(weights[_SLOWEST > 0.5].sum()),
        noise=noise,
        weights=weights,
        taus=taus,
        means=means,
        covariances=covariances,
    )


def _bases(t: Array, taus: Array) -> Array:
    """(models, n, 1 + time constants): a constant, then 1 - exp(-t/tau)."""
    grown = -np.expm1(-t[None, :, None] / taus[:, None, :])
    return np.concatenate([np.ones((*grown.shape[:2], 1)), grown], axis=2)
