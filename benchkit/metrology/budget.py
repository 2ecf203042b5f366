"""Uncertainty budgets: named components, their combination, and correlation between results.

JCGM 100:2008 clause 5 (combination) and annex G.4 (effective degrees of freedom). The coverage
factor is not a blind 2: it belongs to the actual sum of the components (see ``coverage``).
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Literal

from benchkit.metrology.coverage import coverage_factor, nominal_factor

Distribution = Literal["normal", "rectangular"]


@dataclass(frozen=True)
class Component:
    """One source of error as it reaches one result.

    Attributes:
        name: the source. Two results that share a name are fully correlated through it, so a name
            says which instrument and which error ("drop meter gain"), not just "gain".
        u: standard uncertainty already multiplied by its sensitivity, in the unit of the result.
            The sign of the sensitivity is kept: it decides the sign of correlations.
        distribution: ``normal``, also for a Type A mean (Student when ``dof`` is finite), or
            ``rectangular`` for a declared limit of error.
        dof: degrees of freedom, at least 1; infinite for Type B.
    """

    name: str
    u: float
    distribution: Distribution = "normal"
    dof: float = math.inf

    def __post_init__(self) -> None:
        if not self.dof >= 1.0:
            raise ValueError(f"component '{self.name}': dof = {self.dof!r} must be at least 1")
        if self.distribution not in ("normal", "rectangular"):
            raise ValueError(
                f"component '{self.name}': distribution = {self.distribution!r} must be "
                "'normal' or 'rectangular'"
            )
        if self.distribution == "rectangular" and math.isfinite(self.dof):
            # JCGM 100 G.4.3: declared limits are taken as known, so their dof is infinite.
            raise ValueError(f"component '{self.name}': a rectangular one has no finite dof")


@dataclass(frozen=True)
class Expanded:
    """An expanded uncertainty: ``U = k u``, the half-width of the ``coverage`` interval."""

    U: float
    k: float
    u: float
    dof: float
    coverage: float


@dataclass(frozen=True)
class Budget:
    """The components of one result.

    Components that carry the same name within one budget are the same error reaching the result by
    two ways: their signed ``u`` are added, not their squares.
    """

    components: tuple[Component, ...] = field(default=())

    def __init__(self, components: Iterable[Component] = ()) -> None:
        merged: dict[str, Component] = {}
        for component in components:
            known = merged.get(component.name)
            if known is None:
                merged[component.name] = component
                continue
            if (known.distribution, known.dof) != (component.distribution, component.dof):
                raise ValueError(
                    f"component '{component.name}' appears twice with different distributions or "
                    "degrees of freedom: one source of error has one of each"
                )
            merged[component.name] = replace(known, u=known.u + component.u)
        object.__setattr__(self, "components", tuple(merged.values()))

    @classmethod
    def linear(cls, terms: Iterable[tuple[float, Budget]]) -> Budget:
        """Budget of ``sum(c_i * y_i)`` from pairs ``(c_i, budget of y_i)``; shared names add up.

        For a product or a quotient give the partial derivatives as the ``c_i``.
        """
        return cls(
            replace(component, u=sensitivity * component.u)
            for sensitivity, budget in terms
            for component in budget.components
        )

    @cached_property
    def u(self) -> float:
        """Combined standard uncertainty, root-sum-square (JCGM 100, 5.1.2)."""
        return math.hypot(*(c.u for c in self.components))

    @cached_property
    def dof(self) -> float:
        """Effective degrees of freedom by Welch-Satterthwaite (JCGM 100, G.4.1); inf for Type B."""
        if not (0.0 < self.u < math.inf):
            return math.inf
        inverse = sum((c.u / self.u) ** 4 / c.dof for c in self.components)
        return 1.0 / inverse if inverse > 0.0 else math.inf

    def expanded(self, coverage: float = 0.95) -> Expanded:
        """Expanded uncertainty with the coverage factor of the actual sum of the components.

        A budget of nothing has ``U = 0`` with the normal factor; one that holds an infinite or
        not-a-number component has that as its ``U``, which no judgement passes.
        """
        if not 0.0 < coverage < 1.0:
            raise ValueError(f"coverage = {coverage!r} must lie between 0 and 1")
        if not (0.0 < self.u < math.inf):
            return Expanded(self.u, nominal_factor(coverage), self.u, self.dof, coverage)
        k = coverage_factor(
            tuple(abs(c.u) / self.u for c in self.components if c.distribution == "rectangular"),
            tuple(
                (abs(c.u) / self.u, c.dof) for c in self.components if c.distribution == "normal"
            ),
            coverage,
        )
        return Expanded(k * self.u, k, self.u, self.dof, coverage)


def covariance(a: Budget, b: Budget) -> float:
    """Covariance of two results: the sum of ``u_a u_b`` over shared names (JCGM 100, F.1.2.3)."""
    other = {c.name: c.u for c in b.components}
    return math.fsum(c.u * other[c.name] for c in a.components if c.name in other)
