"""Nonlinear weighted least squares with an honest uncertainty budget.

Two kinds of error are kept apart. Noise is independent from point to point and averages out. An
error common to the whole sweep (a meter's gain) does not: it moves every point together and
reaches the parameters through the estimator's own linear map (J'WJ)^-1 J'W.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from benchkit.fits.goodness import judge_fit
from benchkit.metrology.budget import Budget, Component, Distribution

Array = NDArray[np.float64]
Model = Callable[[Array, Array], Array]

_EPS_3 = float(np.cbrt(np.finfo(float).eps))


@dataclass(frozen=True)
class Fit:
    """A fitted law.

    Attributes:
        names: of the p parameters.
        parameters: (p,) their values.
        noise_covariance: (p, p) from the scatter of the points alone.
        contributions: by error source, (p,) what one standard uncertainty of it adds to each
            parameter, with sign.
        distributions: by error source, the distribution of it.
        residuals: (n,) y - model.
        chi2: sum of squared residuals over squared noise; dof: n - p.
        noise_dof: degrees of freedom of the noise: ``dof`` where the noise was estimated from the
            residuals, infinite where it was given.
        residual_sd: sqrt(sum of squared residuals / dof), unweighted; NaN without dof.
        describes: whether the law describes the data, and ``why`` in words where it does not.
        at_bound: parameters that ended on a bound.
        label: says which sweep this is; it keeps the scatter of different sweeps apart in budgets.
    """

    names: tuple[str, ...]
    parameters: Array
    noise_covariance: Array
    contributions: Mapping[str, Array]
    distributions: Mapping[str, Distribution]
    residuals: Array
    chi2: float
    dof: int
    noise_dof: float
    residual_sd: float
    describes: bool
    why: str
    at_bound: tuple[str, ...]
    label: str
    model: Model = field(repr=False)
    estimator: Array = field(repr=False)
    typical: Array = field(repr=False)

    @property
    def covariance(self) -> Array:
        """(p, p) total covariance: noise and every common error."""
        total = self.noise_covariance.copy()
        for c in self.contributions.values():
            total += np.outer(c, c)
        return total

    def __getitem__(self, name: str) -> float:
        """Value of one parameter."""
        return float(self.parameters[self._index(name)])

    def predict(self, x: ArrayLike) -> Array:
        """The fitted law at ``x``."""
        return self.model(np.asarray(x, dtype=np.float64), self.parameters)

    def budget(self, name: str) -> Budget:
        """Uncertainty budget of one parameter."""
        unit = np.zeros(len(self.names))
        unit[self._index(name)] = 1.0
        return self.budget_of(unit, name)

    def budget_at(self, x: ArrayLike) -> Budget:
        """Uncertainty budget of the fitted curve (not of a new reading) at one ``x``."""
        point = np.asarray(x, dtype=np.float64)
        gradient = _jacobian(self.model, point, self.parameters, self.typical)
        if gradient.shape[0] != 1:
            raise ValueError(f"budget_at takes one x at a time, not {gradient.shape[0]}")
        return self.budget_of(gradient[0], f"at {np.array2string(point, precision=6)}")

    def budget_of(self, gradient: ArrayLike, what: str) -> Budget:
        """Budget of any quantity whose derivatives by the parameters are ``gradient`` (p,)."""
        g = np.asarray(gradient, dtype=np.float64)
        blind = np.isinf(self.noise_covariance.diagonal())
        known = np.where(blind[:, None] | blind, 0.0, self.noise_covariance)
        scatter = math.sqrt(max(0.0, float(g @ known @ g)))
        if np.any(g[blind] != 0.0):
            scatter = math.inf  # it leans on a parameter that the data do not determine
        components = [Component(f"{self.label}: scatter ({what})", scatter, dof=self.noise_dof)]
        components += [
            Component(source, float(g @ c), self.distributions[source])
            for source, c in self.contributions.items()
        ]
        return Budget(components)

    def with_common(
        self, common: Mapping[str, ArrayLike], distributions: Mapping[str, Distribution]
    ) -> Fit:
        """The same fit with further common errors, for those whose effect needs the fit itself."""
        contributions = dict(self.contributions)
        shapes = dict(self.distributions)
        for source, added in common.items():
            vector = np.asarray(added, dtype=np.float64)
            if vector.shape != self.residuals.shape:
                raise ValueError(
                    f"common error '{source}' has shape {vector.shape}, must be that of y, "
                    f"{self.residuals.shape}"
                )
            if source not in distributions:
                raise ValueError(f"common error '{source}' has no entry in distributions")
            before = contributions.get(source, np.zeros(len(self.names)))
            if source in shapes and shapes[source] != distributions[source]:
                raise ValueError(f"common error '{source}' is given with two distributions")
            contributions[source] = before + self.estimator @ vector
            shapes[source] = distributions[source]
        return replace(self, contributions=contributions, distributions=shapes)

    def _index(self, name: str) -> int:
        if name not in self.names:
            raise KeyError(f"no parameter '{name}' in this fit; it has {', '.join(self.names)}")
        return self.names.index(name)


def fit(
    model: Model,
    x: ArrayLike,
    y: ArrayLike,
    start: ArrayLike,
    u_noise: ArrayLike,
    common: Mapping[str, ArrayLike] | None = None,
    distributions: Mapping[str, Distribution] | None = None,
    bounds: tuple[ArrayLike, ArrayLike] | None = None,
    scale_noise: bool = False,
    *,
    names: Sequence[str] | None = None,
    label: str = "fit",
) -> Fit:
    """Fit ``y = model(x, parameters)`` by weighted least squares.

    Args:
        model: called with x as given and (p,) parameters, returns (n,).
        x: whatever the model takes; for several quantities stack them along the first axis.
        y: (n,) readings, n >= p.
        start: (p,) where to start; its sizes also set the scale of the parameters.
        u_noise: standard deviation of the noise of each y, one or (n,), above zero. With
            ``scale_noise`` only its relative sizes matter.
        common: by error source, (n,) what one standard uncertainty of it adds to y.
        distributions: by error source, ``normal`` or ``rectangular``.
        bounds: (low, high) of the parameters, each (p,).
        scale_noise: estimate the noise from the residuals; the parameters' scatter is then Student
            with n - p degrees of freedom. Needs n > p.
        names: of the parameters; p1, p2, ... by default.
        label: of the sweep, used in the names of budget components.
    """
    x_all = np.asarray(x, dtype=np.float64)
    y_all = np.asarray(y, dtype=np.float64)
    p0 = np.asarray(start, dtype=np.float64)
    noise = np.broadcast_to(np.asarray(u_noise, dtype=np.float64), y_all.shape)
    n, p = y_all.size, p0.size
    if y_all.ndim != 1 or n < p or (scale_noise and n == p):
        raise ValueError(
            f"{label}: {n} points cannot give {p} parameters"
            + (" and an estimate of the noise" if scale_noise else "")
        )
    if not (np.all(np.isfinite(y_all)) and np.all(np.isfinite(x_all))):
        raise ValueError(f"{label}: the data hold a value that is not a finite number")
    if not (np.all(np.isfinite(noise)) and np.all(noise > 0.0)):
        raise ValueError(f"{label}: the noise of every point must be a number above zero")
    weight = 1.0 / noise
    typical = _typical(p0)

    def weighted(q: Array) -> Array:
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            r = (model(x_all, q) - y_all) * weight
        # A trial step may leave the model's domain: a huge residual sends the search back.
        return np.clip(np.nan_to_num(r, nan=1e100, posinf=1e100, neginf=-1e100), -1e100, 1e100)

    def slopes(q: Array) -> Array:
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            j = _jacobian(model, x_all, q, typical) * weight[:, None]
        return np.clip(np.nan_to_num(j, nan=0.0), -1e100, 1e100)

    best = _minimise(weighted, slopes, p0, bounds)
    residuals = y_all - model(x_all, best)
    chi2 = float(np.sum((residuals * weight) ** 2))
    dof = n - p
    inverse, estimator, blind = _estimator(_jacobian(model, x_all, best, typical), weight)
    s2 = chi2 / dof if scale_noise else 1.0

    label_names = tuple(names) if names is not None else tuple(f"p{i + 1}" for i in range(p))
    if len(label_names) != p:
        raise ValueError(f"{label}: {p} parameters but {len(label_names)} names")
    describes, why = judge_fit(residuals * weight, chi2, dof, noise_known=not scale_noise)
    if np.any(blind):
        lost = ", ".join(name for name, b in zip(label_names, blind, strict=True) if b)
        describes, why = False, "; ".join(filter(None, [why, f"the data do not determine {lost}"]))
    result = Fit(
        names=label_names,
        parameters=best,
        noise_covariance=s2 * inverse,
        contributions={},
        distributions={},
        residuals=residuals,
        chi2=chi2,
        dof=dof,
        noise_dof=float(dof) if scale_noise else math.inf,
        residual_sd=math.sqrt(float(np.sum(residuals**2)) / dof) if dof else math.nan,
        describes=describes,
        why=why,
        at_bound=_at_bound(best, bounds, label_names),
        label=label,
        model=model,
        estimator=estimator,
        typical=typical,
    )
    return result.with_common(common or {}, distributions or {})


def _minimise(
    weighted: Callable[[Array], Array],
    jacobian: Callable[[Array], Array],
    start: Array,
    bounds: tuple[ArrayLike, ArrayLike] | None,
) -> Array:
    from scipy.optimize import least_squares

    if bounds is not None:
        low, high = (np.broadcast_to(np.asarray(b, dtype=np.float64), start.shape) for b in bounds)
        return np.asarray(
            least_squares(
                weighted,
                np.clip(start, low, high),
                jac=jacobian,
                bounds=(low, high),
                x_scale="jac",
                xtol=1e-12,
                ftol=1e-12,
                gtol=1e-12,
            ).x,
            dtype=np.float64,
        )

    def descend(q: Array, scale: Array | None) -> tuple[float, Array]:
        found = least_squares(
            weighted,
            q,
            jac=jacobian,
            method="lm",
            x_scale="jac" if scale is None else scale,
            max_nfev=5000,
            xtol=1e-15,
            ftol=1e-15,
            gtol=1e-15,
        )
        return float(found.cost), np.asarray(found.x, dtype=np.float64)

    # MINPACK's Levenberg-Marquardt, with its steps measured in two ways: by the shape of the
    # problem at the start, and by the start's own sizes. Far from the answer either may go astray.
    ends = [descend(start, None), descend(start, np.where(start == 0.0, 1.0, np.abs(start)))]
    _, best = min(ends, key=lambda end: end[0])
    return descend(best, None)[1]


def _typical(start: Array) -> Array:
    """Smallest size a parameter is stepped by, so that one near zero is not lost in rounding."""
    return np.where(start == 0.0, 1.0, 1e-3 * np.abs(start))


def _jacobian(model: Model, x: Array, q: Array, typical: Array) -> Array:
    """(n, p) central differences; n = 1 for a scalar model."""
    columns = []
    for i, h in enumerate(_EPS_3 * np.maximum(np.abs(q), typical)):
        up, down = q.copy(), q.copy()
        up[i] += h
        down[i] -= h
        change = np.asarray(model(x, up)) - np.asarray(model(x, down))
        columns.append(np.atleast_1d(change / (up[i] - down[i])))
    return np.stack(columns, axis=-1)


def _estimator(jacobian: Array, weight: Array) -> tuple[Array, Array, NDArray[np.bool_]]:
    """(J'WJ)^-1, (J'WJ)^-1 J'W, and which parameters the data leave undetermined.

    By the singular values of the weighted Jacobian with its columns brought to one length, so that
    parameters in volts and in nanoamperes are equally well handled. The variance of an undetermined
    parameter is infinite.
    """
    weighted = jacobian * weight[:, None]
    length = np.sqrt(np.sum(weighted**2, axis=0))
    dead = ~(length > 0.0) | ~np.isfinite(length)
    scale = np.where(dead, 1.0, length)
    left, singular, right = np.linalg.svd(
        np.where(dead, 0.0, weighted / scale), full_matrices=False
    )
    keep = singular > 1e-11 * singular[0] if singular[0] > 0.0 else np.zeros(singular.shape, bool)
    root = right[keep].T / singular[keep]
    inverse = (root @ root.T) / np.outer(scale, scale)
    estimator = (root @ left[:, keep].T) * weight / scale[:, None]
    blind = dead | np.any(np.abs(right[~keep]) > 1e-3, axis=0)
    inverse[blind, blind] = math.inf
    return inverse, estimator, blind


def _at_bound(
    q: Array, bounds: tuple[ArrayLike, ArrayLike] | None, names: Sequence[str]
) -> tuple[str, ...]:
    if bounds is None:
        return ()
    low, high = (np.broadcast_to(np.asarray(b, dtype=np.float64), q.shape) for b in bounds)
    close = 1e-6 * np.where(np.isfinite(high - low), high - low, 1.0)
    on = (q - low < close) | (high - q < close)
    return tuple(name for name, hit in zip(names, on, strict=True) if hit)
