"""Sums of one or two exponentials that settle to a final value, by variable projection.

For given time constants the amplitudes are linear and solved exactly, so only the logarithms of the
time constants are searched (Golub and Pereyra 1973, SIAM J. Numer. Anal. 10, 413). A grid over them
gives the start, which makes the search safe and quick enough to repeat during a soak.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Settling:
    """y(t) = final + sum_i a_i exp(-t/tau_i).

    Attributes:
        final: value for t to infinity.
        amplitudes, taus: (m,) sorted by rising tau.
        covariance: (1 + 2m, 1 + 2m) of final, amplitudes and ln tau for noise of unit standard
            deviation.
        residuals: (n,); chi2: sum of their squares; dof: n - 1 - 2m.
    """

    final: float
    amplitudes: Array
    taus: Array
    covariance: Array
    residuals: Array
    chi2: float
    dof: int

    def curve(self, t: Array) -> Array:
        """The fitted curve at times ``t`` of any shape."""
        return np.asarray(
            self.final + np.exp(-t[..., None] / self.taus) @ self.amplitudes, dtype=np.float64
        )


def fit_settling(
    t: Array, y: Array, terms: int, shortest: float, longest: float
) -> Settling | None:
    """Least squares fit of ``terms`` (1 or 2) exponentials with time constants within two bounds.

    Args:
        t: (n,) times, not negative; y: (n,) readings of equal noise.
        shortest, longest: bounds of the time constants, in the unit of t.

    Returns:
        None where there are not more points than parameters.
    """
    if t.size <= 1 + 2 * terms:
        return None
    grid = np.geomspace(shortest, longest, 20 if terms == 2 else 40)
    log_taus = _polish(t, y, np.log(_grid_start(t, y, grid, terms)), (shortest, longest))
    taus = np.sort(np.exp(log_taus))
    basis = _basis(t, taus)
    amplitudes: Array = np.asarray(np.linalg.lstsq(basis, y, rcond=None)[0], dtype=np.float64)
    residuals = y - basis @ amplitudes
    slopes = basis[:, 1:] * amplitudes[1:] * (t[:, None] / taus)
    covariance = np.linalg.pinv(_scaled_gram(np.hstack([basis, slopes])), hermitian=True)
    scale = np.linalg.norm(np.hstack([basis, slopes]), axis=0)
    scale[scale == 0.0] = 1.0
    scaled: Array = np.asarray(covariance / np.outer(scale, scale), dtype=np.float64)
    return Settling(
        float(amplitudes[0]),
        amplitudes[1:],
        taus,
        scaled,
        residuals,
        float(residuals @ residuals),
        t.size - 1 - 2 * terms,
    )


def _basis(t: Array, taus: Array) -> Array:
    return np.hstack([np.ones((t.size, 1)), np.exp(-t[:, None] / taus)])


def _scaled_gram(jacobian: Array) -> Array:
    length = np.linalg.norm(jacobian, axis=0)
    length[length == 0.0] = 1.0
    unit = jacobian / length
    return np.asarray(unit.T @ unit)


def _grid_start(t: Array, y: Array, grid: Array, terms: int) -> Array:
    """The best time constants of a grid: all normal equations at once, with a slight ridge."""
    basis = _basis(t, grid)
    gram, moment = basis.T @ basis, basis.T @ y
    if terms == 1:
        pairs = np.arange(1, grid.size + 1)[:, None]
    else:
        first, second = np.triu_indices(grid.size, 2)
        pairs = np.stack([first, second], axis=1) + 1
    index = np.hstack([np.zeros((len(pairs), 1), dtype=np.intp), pairs])
    matrices = gram[index[:, :, None], index[:, None, :]]
    ridge = 1e-9 * np.trace(matrices, axis1=1, axis2=2)[:, None, None] * np.eye(terms + 1)
    vectors = moment[index]
    solved = np.linalg.solve(matrices + ridge, vectors[..., None])[..., 0]
    gained = np.sum(solved * vectors, axis=1)
    best: Array = grid[pairs[int(np.argmax(gained))] - 1]
    return best


def _polish(t: Array, y: Array, log_taus: Array, bounds: tuple[float, float]) -> Array:
    from scipy.optimize import least_squares

    low, high = math.log(bounds[0]), math.log(bounds[1])

    def projected(q: Array) -> Array:
        basis = _basis(t, np.exp(q))
        orthogonal = np.linalg.qr(basis)[0]
        return np.asarray(y - orthogonal @ (orthogonal.T @ y))

    found = least_squares(
        projected,
        np.clip(log_taus, low + 1e-6, high - 1e-6),
        bounds=(low, high),
        xtol=1e-6,
        ftol=1e-8,
        gtol=1e-10,
        max_nfev=30,
    )
    return np.asarray(found.x, dtype=np.float64)
