"""The elements a network can hold, each a law between its terminals.

Parameters may be plain numbers or arrays over the batch. Positive current flows from a node into
the element. Signs of a two-terminal element: from its first node to its second.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.diode import DiodeLaw
from benchkit.parts.mosfet import ChannelLaw

Floats = NDArray[np.float64]

CORNER_SHARE, CORNER_A = 0.02, 0.005


ENDS = np.array([1.0, -1.0])
BETWEEN = np.outer(ENDS, ENDS)


def _branch(current: Floats, slope: Floats) -> tuple[Floats, Floats]:
    """Terminal currents and Jacobian of a two-terminal element of V(first) - V(second)."""
    return current[:, None] * ENDS, slope[:, None, None] * BETWEEN


@dataclass(frozen=True)
class Resistor:
    """A linear resistance in ohms."""

    name: str
    nodes: tuple[str, str]
    ohms: Floats | float

    def currents(self, volts: Floats) -> tuple[Floats, Floats]:
        """Ohm's law."""
        slope = np.broadcast_to(1 / np.asarray(self.ohms, dtype=float), volts.shape[:1])
        return _branch((volts[:, 0] - volts[:, 1]) * slope, slope)


@dataclass(frozen=True)
class LimitedSource:
    """A one-quadrant bench supply: constant voltage until its current limit, then that current.

    It delivers between zero and ``limit_A`` and never sinks. Both corners are smoothed over
    CORNER_SHARE of the limit and CORNER_A (softplus), so that they can be solved; what that moves
    is the terminal voltage near a corner, by that current times ``ohms``.
    """

    name: str
    nodes: tuple[str, str]
    emf_V: Floats | float
    limit_A: Floats | float
    ohms: Floats | float = 5e-3

    def currents(self, volts: Floats) -> tuple[Floats, Floats]:
        """Delivered current clipped smoothly to the quadrant it can work in."""
        limit = np.broadcast_to(np.asarray(self.limit_A, dtype=float), volts.shape[:1])
        asked = (self.emf_V - volts[:, 0] + volts[:, 1]) / self.ohms
        width = CORNER_SHARE * limit + CORNER_A
        low, high = asked / width, (asked - limit) / width
        given = width * (np.logaddexp(0, low) - np.logaddexp(0, high))
        slope = (_logistic(low) - _logistic(high)) / self.ohms
        return _branch(-given, slope)


@dataclass(frozen=True)
class CurrentLoad:
    """A constant current from first node to second, as an electronic load draws it."""

    name: str
    nodes: tuple[str, str]
    amps: Floats | float

    def currents(self, volts: Floats) -> tuple[Floats, Floats]:
        """The same current at any voltage."""
        current = np.broadcast_to(np.asarray(self.amps, dtype=float), volts.shape[:1])
        return _branch(current, np.zeros_like(current))


@dataclass(frozen=True)
class Junction:
    """A diode from anode (first node) to cathode (second)."""

    name: str
    nodes: tuple[str, str]
    law: DiodeLaw
    junction_C: Floats | float

    def currents(self, volts: Floats) -> tuple[Floats, Floats]:
        """The junction law of ``benchkit.parts.diode``."""
        current, slope = self.law.current(volts[:, 0] - volts[:, 1], self.junction_C)
        return _branch(current, slope)


@dataclass(frozen=True)
class Channel:
    """A MOSFET's bare channel: drain, gate, source. ``polarity`` +1 for N, -1 for P."""

    name: str
    nodes: tuple[str, str, str]
    law: ChannelLaw
    junction_C: Floats | float
    polarity: int

    def currents(self, volts: Floats) -> tuple[Floats, Floats]:
        """The channel law of ``benchkit.parts.mosfet``, mirrored for a P-channel."""
        drain, gate, source = (self.polarity * volts[:, k] for k in range(3))
        amps, by_gate, by_drain = self.law.current(gate - source, drain - source, self.junction_C)
        none = np.zeros_like(amps)
        currents = self.polarity * np.stack([amps, none, -amps], axis=1)
        row = np.stack([by_drain, by_gate, -by_drain - by_gate], axis=1)
        return currents, np.stack([row, np.zeros_like(row), -row], axis=1)


def _logistic(x: Floats) -> Floats:
    """1 / (1 + exp(-x)), to full relative precision in both tails, where slopes live."""
    return np.exp(-np.logaddexp(0.0, -x))
