"""How a simulated supply's output comes up, and runs down when it is switched off."""

from __future__ import annotations

import math
from dataclasses import dataclass

RISE_S = 0.004
FALL_S, FALL_STEP_S = 0.02, 0.04
NOTHING_V = 1e-3


@dataclass
class RegulatedOutput:
    """What one supply was told, and the voltage that its regulator holds by now."""

    volts: float = 0.0
    limit_A: float = 0.0
    on: bool = False
    emf_V: float = 0.0
    at_switch_V: float = 0.0
    since_switch_s: float = 0.0

    def command(self, volts: float, limit_A: float, on: bool) -> None:
        """Take new set-points."""
        if on != self.on:
            self.since_switch_s, self.at_switch_V = 0.0, self.emf_V
        self.volts, self.limit_A, self.on = volts, limit_A, on

    def restart(self) -> None:
        """Nothing left of what was before: a board was put in."""
        self.emf_V = self.at_switch_V = self.since_switch_s = 0.0

    def steady_s(self) -> float:
        """How long its voltage stays what it is."""
        if self.on:
            if self.emf_V == self.volts:
                return math.inf
            return max(0.0, RISE_S - self.since_switch_s)
        if self.emf_V == 0:
            return math.inf
        steps = math.floor(self.since_switch_s / FALL_STEP_S)
        return (steps + 1) * FALL_STEP_S - self.since_switch_s

    def pass_time(self, seconds: float) -> None:
        """Up after a dead time; down like a capacitor that discharges, in steps, because every
        step is an operating point to solve."""
        self.since_switch_s += seconds
        if self.on:
            if self.since_switch_s >= RISE_S:
                self.emf_V = self.volts
            return
        steps = math.floor(self.since_switch_s / FALL_STEP_S)
        left = self.at_switch_V * math.exp(-steps * FALL_STEP_S / FALL_S)
        self.emf_V = left if left > NOTHING_V else 0.0
