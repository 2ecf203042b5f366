"""Values with a unit prefix, as a technician would say them."""

from __future__ import annotations

import math

PREFIXES = ((1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"))


def spoken(value: float, unit: str, digits: int = 3) -> str:
    """Such as ``2.4 µA``, ``-15 V``; zero for what is below a thousandth of a nano-unit."""
    if not math.isfinite(value):
        return f"{value:g} {unit}"
    for scale, prefix in PREFIXES:
        # What rounds up to the next prefix is already its.
        if abs(value) >= scale * (1 - 0.5 * 10.0**-digits):
            return f"{float(f'{value / scale:.{digits}g}'):g} {prefix}{unit}"
    return f"{value / 1e-9:.2g} n{unit}" if abs(value) >= 1e-12 else f"0 {unit}"


def lasting(seconds: float) -> str:
    """Such as ``6.4 ms``, ``2 min``, ``1 h``."""
    for unit_s, unit in ((3600.0, "h"), (60.0, "min")):
        if seconds >= 2 * unit_s or (unit == "h" and seconds >= unit_s):
            return f"{seconds / unit_s:.2g} {unit}"
    return spoken(seconds, "s", 2)
