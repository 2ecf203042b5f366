"""Verdicts: a measured value against a limit, with its uncertainty and a stated decision rule.

Guarded acceptance with a guard band w = U (ILAC-G8:09/2019, 4.2; JCGM 106:2012, 8.3) is the
default: a pass leaves at most 2.5 % risk that the true value is outside one limit.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from statistics import NormalDist
from typing import Literal

from benchkit.metrology.budget import Expanded

Decision = Literal["pass", "fail", "undecided"]
Rule = Literal["guarded", "simple"]


@dataclass(frozen=True)
class Limit:
    """Tolerance limits, both included; None where there is none on that side."""

    low: float | None
    high: float | None

    def __post_init__(self) -> None:
        bounds = [b for b in (self.low, self.high) if b is not None]
        if not bounds:
            raise ValueError("limit: give low, high or both; without one nothing can be judged")
        if any(math.isnan(b) for b in bounds):
            raise ValueError(f"limit: low = {self.low}, high = {self.high} must be numbers")
        if len(bounds) == 2 and bounds[0] > bounds[1]:
            raise ValueError(f"limit: low = {self.low} is above high = {self.high}")

    def margin(self, value: float) -> float:
        """Distance to the nearest limit: positive inside, negative outside."""
        inside = []
        if self.low is not None:
            inside.append(value - self.low)
        if self.high is not None:
            inside.append(self.high - value)
        return min(inside)


@dataclass(frozen=True)
class Judged:
    """A verdict and what it rests on.

    Attributes:
        verdict: pass, fail or undecided.
        conformity_probability: probability that the true value lies within the limit, given the
            reading and its uncertainty (JCGM 106, 7); NaN when the reading is no number.
        margin: distance of the reading to the nearest limit, positive inside.
    """

    verdict: Decision
    conformity_probability: float
    margin: float


def judge(measured: float, expanded: Expanded, limit: Limit, rule: Rule = "guarded") -> Judged:
    """Judge one measured value.

    ``guarded``: pass when inside the limit by U or more, fail when outside by more than U,
    undecided between. ``simple``: pass or fail at the limit itself. A reading or an uncertainty
    that is not a finite number is undecided under either rule, never a pass.
    """
    if rule not in ("guarded", "simple"):
        raise ValueError(f"decision rule {rule!r} must be 'guarded' or 'simple'")
    if not math.isfinite(measured) or not (0.0 <= expanded.U < math.inf):
        return Judged("undecided", math.nan, math.nan)
    margin = limit.margin(measured)
    guard = expanded.U if rule == "guarded" else 0.0
    verdict: Decision = "undecided"
    if margin >= guard:
        verdict = "pass"
    elif margin < -guard:
        verdict = "fail"
    return Judged(verdict, _conformity(measured, expanded, limit), margin)


def _conformity(measured: float, expanded: Expanded, limit: Limit) -> float:
    low = -math.inf if limit.low is None else limit.low
    high = math.inf if limit.high is None else limit.high
    if expanded.u == 0.0:
        return 1.0 if low <= measured <= high else 0.0
    below, above = (low - measured) / expanded.u, (high - measured) / expanded.u
    if math.isinf(expanded.dof):
        normal = NormalDist()
        return normal.cdf(above) - normal.cdf(below)
    from scipy.special import stdtr

    return float(stdtr(expanded.dof, above) - stdtr(expanded.dof, below))


def normalised_error(measured: float, U: float, predicted: float, U_predicted: float) -> float:
    """En = |measured - predicted| / sqrt(U^2 + U_predicted^2) (ISO/IEC 17043); 1 or less agrees.

    With no uncertainty on either side it is 0 for equal values and infinite for others.
    """
    difference = abs(measured - predicted)
    both = math.hypot(U, U_predicted)
    if both == 0.0:
        return math.nan if math.isnan(difference) else (0.0 if difference == 0.0 else math.inf)
    return difference / both


def overall(verdicts: Iterable[Decision]) -> Decision:
    """Verdict of a whole run: a fail dominates, then an undecided; nothing judged is undecided."""
    seen = list(verdicts)
    if "fail" in seen:
        return "fail"
    return "pass" if seen and all(v == "pass" for v in seen) else "undecided"
