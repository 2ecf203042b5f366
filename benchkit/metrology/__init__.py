"""Uncertainty and verdicts: budgets, coverage factors, propagation, decision rules.

Pure functions over numbers; scipy is imported only where a Student distribution needs it.
"""

from benchkit.metrology.accuracy import Accuracy
from benchkit.metrology.budget import Budget, Component, Distribution, Expanded, covariance
from benchkit.metrology.judgement import (
    Decision,
    Judged,
    Limit,
    Rule,
    judge,
    normalised_error,
    overall,
)
from benchkit.metrology.propagate import MonteCarlo, monte_carlo, propagate

__all__ = [
    "Accuracy",
    "Budget",
    "Component",
    "Decision",
    "Distribution",
    "Expanded",
    "Judged",
    "Limit",
    "MonteCarlo",
    "Rule",
    "covariance",
    "judge",
    "monte_carlo",
    "normalised_error",
    "overall",
    "propagate",
]
