"""How the simulated board really warms: more time constants than any fit here assumes.

The case sits on the board (fast) which sits in air (slow); the junction leads the case and the
sensor lags it. Air takes heat away better the hotter the board is (natural convection), so the
resistance falls as the rise grows.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

FAST_SHARE = 0.22
CONVECTION_EXPONENT = -0.12
CONVECTION_AT_K = 25.0
JUNCTION_LAG_S = 0.05
SENSOR_LAG_S = 1.5
LONGEST_STEP_S = 0.5


@dataclass
class BoardHeat:
    """Temperatures above ambient, in kelvin, driven by the loss in watts."""

    case_to_ambient_K_per_W: float
    junction_to_case_K_per_W: float
    slow_s: float
    fast_s: float
    slow_K: float = 0.0
    fast_K: float = 0.0
    junction_K: float = 0.0
    sensor_K: float = field(default=0.0)

    @property
    def case_K(self) -> float:
        """Case above ambient."""
        return self.slow_K + self.fast_K

    def resistance(self, rise_K: float) -> float:
        """Case-to-ambient resistance at a rise, from natural convection."""
        ratio = max(rise_K, 0.5) / CONVECTION_AT_K
        return float(self.case_to_ambient_K_per_W * ratio**CONVECTION_EXPONENT)

    def pass_time(self, seconds: float, loss_W: float) -> None:
        """Warm or cool for a while at constant loss (at most LONGEST_STEP_S)."""
        whole = self.resistance(self.case_K) * loss_W
        slow = math.exp(-seconds / self.slow_s)
        fast = math.exp(-seconds / self.fast_s)
        junction = math.exp(-seconds / JUNCTION_LAG_S)
        sensor = math.exp(-seconds / SENSOR_LAG_S)
        self.slow_K = whole * (1 - FAST_SHARE) + (self.slow_K - whole * (1 - FAST_SHARE)) * slow
        self.fast_K = whole * FAST_SHARE + (self.fast_K - whole * FAST_SHARE) * fast
        above = self.junction_to_case_K_per_W * loss_W
        self.junction_K = above + (self.junction_K - above) * junction
        self.sensor_K = self.case_K + (self.sensor_K - self.case_K) * sensor

    def final_case_K(self, loss_W: float) -> float:
        """The rise that a constant loss ends at."""
        rise = 10.0
        for _ in range(200):
            rise = self.resistance(rise) * loss_W
        return rise
