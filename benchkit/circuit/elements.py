"""The elements a network can hold, each a law between its terminals.

Parameters may be plain numbers or arrays over the batch, shape (batch,). Positive current flows
from a branch's first terminal through the element to its second.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.network import Branch
from benchkit.parts.bipolar import BipolarAt
from benchkit.parts.diode import DiodeAt
from benchkit.parts.fuse import FuseAt
from benchkit.parts.mosfet import ChannelAt

Floats = NDArray[np.float64]

CORNER_SHARE, CORNER_A = 0.02, 0.005


@dataclass(frozen=True)
class Resistor:
    """A linear resistance in ohms."""

    name: str
    nodes: tuple[str, str]
    ohms: Floats | float

    def branches(self, volts: Floats) -> list[Branch]:
        """Ohm's law."""
        slope = 1 / np.asarray(self.ohms, dtype=float)
        return [Branch(0, 1, (volts[0] - volts[1]) * slope, ((0, 1, slope),))]


@dataclass(frozen=True)
class Emf:
    """A voltage behind a resistance: a battery, a charged capacitor, a stiff source."""

    name: str
    nodes: tuple[str, str]
    emf_V: Floats | float
    ohms: Floats | float

    def branches(self, volts: Floats) -> list[Branch]:
        """Ohm's law about the open-circuit voltage, plus pole first."""
        slope = 1 / np.asarray(self.ohms, dtype=float)
        return [Branch(0, 1, (volts[0] - volts[1] - self.emf_V) * slope, ((0, 1, slope),))]


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

    def branches(self, volts: Floats) -> list[Branch]:
        """Delivered current clipped smoothly to the quadrant it can work in."""
        asked = (self.emf_V - volts[0] + volts[1]) / self.ohms
        width = CORNER_SHARE * self.limit_A + CORNER_A
        low, high = asked / width, (asked - self.limit_A) / width
        # Softplus of low less softplus of high, as corners and their rounding: far beyond a corner
        # the difference of two large numbers would lose a small limit.
        low_tail, high_tail = np.exp(-np.abs(low)), np.exp(-np.abs(high))
        corners = np.clip(asked, 0.0, self.limit_A)
        given = corners + width * (np.log1p(low_tail) - np.log1p(high_tail))
        # Both in [0, 1]; the difference keeps its precision in either tail of the quadrant.
        low_part, high_part = low_tail / (1 + low_tail), high_tail / (1 + high_tail)
        slope = np.where(
            low < 0, low_part - high_part,
            np.where(high < 0, 1 - low_part - high_part, high_part - low_part),
        ) / self.ohms  # fmt: skip
        return [Branch(0, 1, -given, ((0, 1, slope),))]


@dataclass(frozen=True)
class CurrentLoad:
    """A constant current from first node to second, as an electronic load draws it."""

    name: str
    nodes: tuple[str, str]
    amps: Floats | float

    def branches(self, volts: Floats) -> list[Branch]:
        """The same current at any voltage."""
        return [Branch(0, 1, np.broadcast_to(np.asarray(self.amps, float), volts[0].shape), ())]


@dataclass(frozen=True)
class Junction:
    """A diode from anode (first node) to cathode (second), with its breakdown if it has one."""

    name: str
    nodes: tuple[str, str]
    law: DiodeAt

    def branches(self, volts: Floats) -> list[Branch]:
        """The junction law of ``benchkit.parts.diode``."""
        current, slope = self.law.current(volts[0] - volts[1])
        return [Branch(0, 1, current, ((0, 1, slope),))]


@dataclass(frozen=True)
class FuseLink:
    """A fuse that has not opened, warm as its current makes it."""

    name: str
    nodes: tuple[str, str]
    law: FuseAt

    def branches(self, volts: Floats) -> list[Branch]:
        """The resistance law of ``benchkit.parts.fuse``."""
        current, slope = self.law.current(volts[0] - volts[1])
        return [Branch(0, 1, current, ((0, 1, slope),))]


@dataclass(frozen=True)
class Channel:
    """A MOSFET's bare channel: drain, gate, source. ``polarity`` +1 for N, -1 for P."""

    name: str
    nodes: tuple[str, str, str]
    law: ChannelAt
    polarity: int

    def branches(self, volts: Floats) -> list[Branch]:
        """The channel law of ``benchkit.parts.mosfet``, mirrored for a P-channel."""
        drain, gate, source = volts
        amps, by_gate, by_drain = self.law.current(
            self.polarity * (gate - source), self.polarity * (drain - source)
        )
        inner = np.abs(self.law.threshold_V) + self.law.twice_vt_V
        slopes = ((1, 2, by_gate), (0, 2, by_drain))
        return [Branch(0, 2, self.polarity * amps, slopes, inner)]


@dataclass(frozen=True)
class Bipolar:
    """A bipolar transistor: collector, base, emitter. ``polarity`` +1 for NPN, -1 for PNP."""

    name: str
    nodes: tuple[str, str, str]
    law: BipolarAt
    polarity: int

    def branches(self, volts: Floats) -> list[Branch]:
        """The law of ``benchkit.parts.bipolar``, mirrored for a PNP."""
        collector, base, emitter = volts
        ic, ib, ic_be, ic_bc, ib_be, ib_bc = self.law.current(
            self.polarity * (base - emitter), self.polarity * (base - collector)
        )
        return [
            Branch(0, 2, self.polarity * ic, ((1, 2, ic_be), (1, 0, ic_bc))),
            Branch(1, 2, self.polarity * ib, ((1, 2, ib_be), (1, 0, ib_bc))),
        ]
