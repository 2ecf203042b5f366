"""How 'typical', 'minimum' and 'maximum' of a datasheet are read as a distribution.

A printed maximum is a test limit that every delivered part has passed. Here it is read as three
standard deviations above the typical value, and the distribution is cut off there, so no sample
is worse than the sheet allows (common practice, no source). A side that is not printed mirrors
the other one. One standard score a part and law parameter drives all points of that part
together: a part that drops more at one current drops more at all.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

SIGMAS_TO_LIMIT = 3.0

Floats = NDArray[np.float64]


def scores(generator: np.random.Generator, size: int) -> Floats:
    """``size`` standard normal scores cut off at plus and minus SIGMAS_TO_LIMIT."""
    values = generator.standard_normal(size)
    while np.any(outside := np.abs(values) > SIGMAS_TO_LIMIT):
        values[outside] = generator.standard_normal(int(outside.sum()))
    return values


def between(score: Floats, low: float, middle: float, high: float) -> Floats:
    """Map scores of -3, 0, +3 to ``low``, ``middle``, ``high``, linearly on each side."""
    share = np.asarray(score, dtype=float) / SIGMAS_TO_LIMIT
    return middle + np.where(share > 0, (high - middle) * share, (middle - low) * share)
