"""The fuse law: a resistance that rises as it warms, and the time until it melts.

The element's rise above ambient, as a share of the rise at which it melts, follows

    d theta / dt = ((I / I0)^2 - theta) / tau

so that from cold it melts after t(I) = -tau ln(1 - (I0 / I)^2), never at or below I0, and at large
currents I^2 t tends to tau I0^2, the melting I2t of the sheet (adiabatic: no heat leaves). Until it
has melted, and in its steady state, its resistance is Rc (1 + r theta).

One time constant is less than a real fuse has, a slow one above all: between the opening current
and some ten times the rated current real fuses melt later than the law. ``benchkit.parts.
fuse_points`` carries what the printed points say beside it.

Validity: direct current, still air at about 25 degrees Celsius for the opening current; the cold
resistance follows the ambient as a pure metal's does.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.resistor import ResistorLaw

Floats = NDArray[np.float64]

METAL_PER_K = 3.8e-3
"""Of a pure metal's resistance at 25 C: copper, silver and zinc alike (handbooks, from memory)."""
LEAST_HOT_RATIO = 1e-30
"""Keeps the closed form finite where the resistance does not rise."""


@dataclass(frozen=True)
class FuseAt:
    """A fuse that has not opened, in its steady state, at one ambient temperature.

    V = I Rc (1 + r min((I/I0)^2, 1)): numbers or arrays (batch,) of cold_ohm, hot_ratio r and
    fusing_A I0.
    """

    cold_ohm: Floats | float
    hot_ratio: Floats | float
    fusing_A: Floats | float

    def current(self, volts: Floats) -> tuple[Floats, Floats]:
        """Current in amperes and its slope in siemens at a voltage across it, shape (batch,).

        The one real root of x + r x^3 = V / (I0 Rc), by hyperbolic functions; beyond I0, linear.
        """
        r = np.maximum(self.hot_ratio, LEAST_HOT_RATIO)
        height = volts / (self.fusing_A * self.cold_ohm)
        bend = np.sqrt(3 * r)
        root = 2 / bend * np.sinh(np.arcsinh(1.5 * bend * height) / 3)
        beyond = np.abs(height) >= 1 + r
        share = np.where(beyond, height / (1 + r), root)
        rise = np.where(beyond, r, 3 * r * root**2)
        return self.fusing_A * share, 1 / (self.cold_ohm * (1 + rise))


@dataclass(frozen=True)
class FuseLaw:
    """Parameters at 25 degrees Celsius; any of them may be an array (samples,).

    fusing_A: I0, the largest current that never melts it. melting_s: tau. arcing_A2s: what flows
    on between melting and clearing.
    """

    cold_ohm: Floats | float
    hot_ratio: Floats | float
    fusing_A: Floats | float
    melting_s: Floats | float
    arcing_A2s: Floats | float

    def at(self, junction_C: Floats | float) -> FuseAt:
        """Its resistance at an ambient temperature."""
        cold = ResistorLaw(self.cold_ohm, METAL_PER_K).at(junction_C).ohms
        return FuseAt(cold, self.hot_ratio, self.fusing_A)

    @property
    def melting_A2s(self) -> Floats | float:
        """I2t until it melts, of currents so large that no heat leaves."""
        return self.melting_s * np.square(self.fusing_A)

    def time_to_melt_s(self, current_A: Floats | float) -> Floats:
        """From cold at a constant current; infinite at or below the opening current."""
        amps = np.abs(np.asarray(current_A, dtype=float))
        above = amps > self.fusing_A
        share = np.where(above, self.fusing_A / np.where(above, amps, 1.0), 0.5) ** 2
        share = np.minimum(share, 1 - np.finfo(float).epsneg)
        return np.where(above, -self.melting_s * np.log1p(-share), np.inf)
