"""What the supply and the load are to the circuit: elements of the plant's network."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.network import Branch

Floats = NDArray[np.float64]

SUPPLY_OHM = 0.005
SUPPLY_EDGES, BATTERY_EDGES = (0.05, 0.01), (0.005, 0.001)
"""The preload that an output sinks at most, and how softly it ends, in amperes."""
FADE_V = 0.05
VOLT_MODE_OHM = 0.05
BLEED_S = 5e-6
"""What the load's input and the meter draw at any setting, and at either polarity."""
BACKWARDS_V, BACKWARDS_OHM, KNEE_V = 0.6, 0.03, 0.03
"""From where, and through how much, a load without a stage that blocks conducts backwards."""


@dataclass(frozen=True)
class LoadInput:
    """An electronic load, plus first: it sinks, less and less as the voltage across it goes.

    Backwards it draws its bleed only, unless ``conducts_back``: the transistors of many a load
    have body diodes, and nothing in series that blocks (common practice, no source).
    """

    name: str
    nodes: tuple[str, str]
    mode: str
    value: Floats | float
    conducts_back: bool = False

    def branches(self, volts: Floats) -> list[Branch]:
        """Constant current, resistance, or voltage (behind VOLT_MODE_OHM)."""
        across = volts[0] - volts[1]
        forwards = np.maximum(across, 0.0)
        if self.mode == "CURR":
            # Squared, so that there is no corner at no voltage at all.
            part = np.tanh(forwards / FADE_V)
            current = self.value * part**2
            slope = 2 * self.value * part * (1 - part**2) / FADE_V
        elif self.mode == "RES":
            # Bends into the straight line within FADE_V.
            part = np.tanh(forwards / FADE_V)
            current = forwards * part / self.value
            slope = (part + forwards * (1 - part**2) / FADE_V) / self.value
        else:
            over = (across - self.value) / FADE_V
            current = np.logaddexp(0.0, over) * FADE_V / VOLT_MODE_OHM
            slope = 0.5 * (1 + np.tanh(0.5 * over)) / VOLT_MODE_OHM
        current, slope = current + BLEED_S * across, slope + BLEED_S
        if self.conducts_back:
            over = (-across - BACKWARDS_V) / KNEE_V
            current = current - np.logaddexp(0.0, over) * KNEE_V / BACKWARDS_OHM
            slope = slope + 0.5 * (1 + np.tanh(0.5 * over)) / BACKWARDS_OHM
        return [Branch(0, 1, current, ((0, 1, slope),))]


@dataclass(frozen=True)
class SupplyOutput:
    """A bench supply: constant voltage up to its current limit, able to sink its own preload.

    The preload keeps it linear around no load, where a supply that could not sink at all would
    have a corner just where a run begins.
    """

    name: str
    nodes: tuple[str, str]
    emf_V: float
    limit_A: float
    ohms: float
    """Its own, and those of the lead (and of the shunt, where that is) up to the port."""
    preload_A: float = SUPPLY_EDGES[0]
    narrow_A: float = SUPPLY_EDGES[1]

    def branches(self, volts: Floats) -> list[Branch]:
        """Smoothed at both ends (softplus), so that it can be solved."""
        wide = 0.02 * self.limit_A + 0.005
        asked = (self.emf_V - volts[0] + volts[1]) / self.ohms
        narrow, preload = self.narrow_A, self.preload_A
        low, high = (asked + preload) / narrow, (asked - self.limit_A) / wide
        given = narrow * np.logaddexp(0.0, low) - preload - wide * np.logaddexp(0.0, high)
        slope = 0.5 * (np.tanh(0.5 * low) - np.tanh(0.5 * high)) / self.ohms
        return [Branch(0, 1, -given, ((0, 1, slope),))]
