"""What an instrument's maker declares about one range, as standard uncertainties.

A declared limit of error says only "within plus or minus a", so it is read as a rectangular
distribution of half-width a, whose standard uncertainty is a/sqrt(3) (JCGM 100:2008, 4.3.7).
"""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class Accuracy:
    """Declared limits of error of one range of one instrument.

    The gain part grows with the reading and the offset part does not. They are kept apart because
    over a sweep each is one common error: neither averages out over the points.

    Attributes:
        range: full scale of the range, in the unit of the reading (> 0).
        reading_percent: limit of error in percent of the reading (>= 0).
        range_percent: limit of error in percent of the range (>= 0).
        offset: further fixed limit of error, e.g. counts, in the unit of the reading (>= 0).
    """

    range: float
    reading_percent: float = 0.0
    range_percent: float = 0.0
    offset: float = 0.0

    def __post_init__(self) -> None:
        if not (math.isfinite(self.range) and self.range > 0.0):
            raise ValueError(f"accuracy: range = {self.range!r} must be a number above zero")
        for key in ("reading_percent", "range_percent", "offset"):
            value = getattr(self, key)
            if not (math.isfinite(value) and value >= 0.0):
                raise ValueError(f"accuracy: {key} = {value!r} must be zero or a positive number")

    def gain_limit(self) -> float:
        """Half-width of the gain error, relative (0.001 is a tenth of a percent)."""
        return self.reading_percent / 100.0

    def offset_limit(self) -> float:
        """Half-width of the offset error, in the unit of the reading."""
        return self.range * self.range_percent / 100.0 + self.offset

    def standard_uncertainty(self, value: float) -> float:
        """Standard uncertainty of one reading of ``value``: both rectangulars, root-sum-square."""
        return math.hypot(abs(value) * self.gain_limit(), self.offset_limit()) / math.sqrt(3.0)
