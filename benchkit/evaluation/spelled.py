"""Figures as they stand in a sentence or a table."""

from __future__ import annotations

import math

from benchkit.evaluation.verdict import rounded
from benchkit.prefixes import spoken

LEAST = {"A": 1e-12, "V": 1e-6}
"""Below this a prediction is as good as nothing."""
NONE = "–"
SCALES = ((1.0, ""), (1e3, "m"), (1e6, "µ"))


def paired(value: float, U: float, unit: str) -> str:
    """Both numbers in the unit of the larger, to the decimal place that U allows."""
    most = max(abs(value), U if math.isfinite(U) else 0.0)
    factor, prefix = next(((f, p) for f, p in SCALES if f * most >= 1.0), (1e9, "n"))
    shown, spread = rounded(factor * value, factor * U)
    return f"{minus(shown)} ± {spread} {prefix}{unit}"


def minus(number: str) -> str:
    """A minus sign instead of a hyphen, and none before a zero."""
    return number.replace("-", "−") if number.strip("-0.") else number.lstrip("-")


def small(value: float, unit: str) -> str:
    """Two figures, and 0 for next to nothing."""
    if not math.isfinite(value):
        return NONE
    least = LEAST.get(unit, 0.0)
    return f"0 {unit}" if abs(value) < least else minus(spoken(value, unit, 2))


def spanned(low: float, high: float, unit: str) -> str:
    """From one to the other."""
    return f"{small(low, unit)} to {small(high, unit)}"
