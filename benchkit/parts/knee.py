"""Reverse breakdown: an exponential knee in series with the dynamic resistance.

    I + I0 = It exp((V - Vz - (I + I0 - It) r) / s)

V and I in reverse, from cathode to anode; It at Vz is the point that a sheet prints, s the width
of the knee and r what remains of the dynamic resistance far above it, so that the slope at any
current is dV/dI = r + s/I. Solved for I by the Wright omega function. I0, what the exponential
alone would leave at no voltage, keeps the part passive; it is nothing where Vz is many times s.
Vz moves with temperature by a constant number of volts a kelvin (tunnelling falls, avalanche
rises: Sze, Physics of Semiconductor Devices); s does not, unlike the kT/q of a forward junction.

Validity: where the sheet's points are; no snap-back, no heating within a pulse.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.omega import omega

Floats = NDArray[np.float64]

REFERENCE_C = 25.0
LEAST_SERIES_OHM = 1e-6
FAR_BELOW = -80.0
"""Of the exponent: where all entries are lower, less than 1e-34 of the knee's current flows, and
none is worked out."""


@dataclass(frozen=True)
class KneeAt:
    """A knee at its junction temperature; its fields are numbers or arrays (batch,).

    offset: the exponent at no voltage. rest: omega there. unit_A: scale over resistance.
    """

    offset: Floats | float
    rest: Floats | float
    scale_V: Floats | float
    series_ohm: Floats | float

    def current(self, reverse_V: Floats) -> tuple[Floats, Floats]:
        """Current in amperes from cathode to anode, never negative, and its slope in siemens.

        reverse_V: cathode above anode, shape (batch,); in forward nothing flows.
        """
        z = self.offset + np.maximum(reverse_V, 0.0) / self.scale_V
        if not z.size or z.max() < FAR_BELOW:
            return np.zeros(z.shape), np.zeros(z.shape)
        w = omega(z)
        amps = np.maximum(w - self.rest, 0.0) * (self.scale_V / self.series_ohm)
        return amps, w / ((1 + w) * self.series_ohm) * (reverse_V > 0)


@dataclass(frozen=True)
class KneeLaw:
    """volts_V at test_A and 25 degrees Celsius; any of the fields may be an array over samples."""

    volts_V: Floats | float
    test_A: Floats | float
    scale_V: Floats | float
    series_ohm: Floats | float
    tempco_V_per_K: Floats | float = 0.0

    def at(self, junction_C: Floats | float) -> KneeAt:
        """The law at junction temperatures, shape (batch,) or one number."""
        warmer = np.asarray(junction_C, dtype=float) - REFERENCE_C
        volts = self.volts_V + self.tempco_V_per_K * warmer
        series = np.maximum(self.series_ohm, LEAST_SERIES_OHM)
        drop = self.test_A * series / self.scale_V
        offset = np.log(drop) + drop - volts / self.scale_V
        return KneeAt(offset, omega(offset), self.scale_V, series)
