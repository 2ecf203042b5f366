"""The Wright omega function of a real argument: the solution of w + ln(w) = z.

It solves an exponential law in series with a resistance in closed form (Corless and Jeffrey, "The
Wright omega function", 2002). Written with plain exponentials and logarithms, which run many
entries at once, because it is most of the work of a network's solution: ``scipy.special`` has the
same function at some five times the time.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

LEAST = -700.0
"""Below this the function is taken as constant, at 1e-304, so that it has a logarithm."""


def omega(z: Floats, steps: int = 2) -> Floats:
    """omega(z), shape of ``z``, for any z below 1e150; its derivative is w / (1 + w).

    steps: of refinement; two reach the last bits, one leaves a relative error below 2e-11.
    """
    z = np.maximum(z, LEAST)
    # softplus(z), then Winitzki's approximation of the Lambert function (2003), its two constants
    # fitted to what one refinement leaves: within 1.1 % everywhere.
    soft = np.maximum(np.log1p(np.exp(np.minimum(z, 500.0))), z)
    bend = np.log1p(soft)
    w = soft - soft * bend / (2.253 - 0.127 * bend + soft)
    for _ in range(steps):
        # Fritsch, Shafer and Crowley 1973: the error's fourth power.
        left = z - w - np.log(w)
        above = 1 + w
        share = (2 * above + (4 / 3) * left) * above
        w = w + w * (left / above) * ((share - left) / (share - 2 * left))
    return w
