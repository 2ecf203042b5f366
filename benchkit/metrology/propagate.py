"""Propagation of uncertainty through a function: linear, and by random draws.

Both take the same function: ``f`` receives an array whose FIRST axis runs over the n inputs, of
shape (n,) or (n, N), and returns the m outputs along its first axis, (m,) or (m, N). So
``def f(x): v, i = x; return np.array([v / i])`` serves both. With a single output the first axis
may be left out.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]
Function = Callable[[Array], ArrayLike]


@dataclass(frozen=True)
class MonteCarlo:
    """Outcome of ``monte_carlo``: every field over the m outputs.

    ``low`` and ``high`` bound the probabilistically symmetric 95 % interval (JCGM 101, 7.7).
    """

    mean: Array
    u: Array
    covariance: Array
    low: Array
    high: Array


def propagate(f: Function, x: ArrayLike, cov: ArrayLike) -> tuple[Array, Array]:
    """Law of propagation of uncertainty with correlated inputs (JCGM 100:2008, 5.2; JCGM 102, 6.2).

    Args:
        f: the function, see the module text.
        x: the n inputs.
        cov: their (n, n) covariance, or n standard uncertainties of uncorrelated inputs.

    Returns:
        the m outputs, and their (m, m) covariance. The derivatives are central differences.
    """
    point, covariance = _inputs(x, cov)
    y = _rows(f(point), 1)
    # The truncation error of a central difference falls with the step and the rounding error grows:
    # the cube root of the machine's resolution balances them; an input near zero is stepped on the
    # scale of its own uncertainty instead.
    step = np.maximum(
        np.cbrt(np.finfo(float).eps) * np.abs(point), 1e-4 * np.sqrt(covariance.diagonal())
    )
    step[step == 0.0] = np.cbrt(np.finfo(float).eps)
    jacobian = np.empty((y.size, point.size))
    for i, h in enumerate(step):
        up, down = point.copy(), point.copy()
        up[i] += h
        down[i] -= h
        jacobian[:, i] = (_rows(f(up), 1) - _rows(f(down), 1)) / (up[i] - down[i])
    return y, jacobian @ covariance @ jacobian.T


def monte_carlo(f: Function, x: ArrayLike, cov: ArrayLike, n: int, seed: int) -> MonteCarlo:
    """Propagation of distributions for jointly normal inputs (JCGM 101:2008, 6.4.8 and clause 7).

    Args:
        f: the function, called once with all draws, shape (inputs, n).
        x: the inputs.
        cov: their covariance, or standard uncertainties of uncorrelated inputs.
        n: number of draws, at least 100.
        seed: of the random draws; the same seed gives the same result.
    """
    if n < 100:
        raise ValueError(f"monte_carlo: n = {n} draws are too few for a 95 % interval: 100 or more")
    point, covariance = _inputs(x, cov)
    # Eigenvectors rather than Cholesky: a fully correlated covariance is singular and still fine.
    values, vectors = np.linalg.eigh(covariance)
    root = vectors * np.sqrt(np.clip(values, 0.0, None))
    draws = np.random.default_rng(seed).standard_normal((point.size, n))
    y = _rows(f(point[:, None] + root @ draws), 2)
    low, high = np.quantile(y, (0.025, 0.975), axis=1)
    covariance_y = np.atleast_2d(np.cov(y))
    return MonteCarlo(y.mean(axis=1), np.sqrt(covariance_y.diagonal()), covariance_y, low, high)


def _inputs(x: ArrayLike, cov: ArrayLike) -> tuple[Array, Array]:
    point = np.atleast_1d(np.asarray(x, dtype=np.float64))
    covariance = np.asarray(cov, dtype=np.float64)
    if covariance.ndim == 1:
        covariance = np.diag(covariance**2)
    if point.ndim != 1 or covariance.shape != (point.size, point.size):
        raise ValueError(
            f"propagation of {point.shape} inputs needs a covariance of shape (n, n) or n standard "
            f"uncertainties, not {np.shape(cov)}"
        )
    return point, covariance


def _rows(values: ArrayLike, ndim: int) -> Array:
    out = np.asarray(values, dtype=np.float64)
    return out if out.ndim == ndim else out[None, ...]
