"""Resistors and leads: a value, linear in temperature.

    R(T) = R(25 C) (1 + tempco (T - 25 C))

Validity: -80 to 250 degrees Celsius, for coefficients that the tables of the stage file allow.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.files.parts.passives import Lead, Resistor
from benchkit.parts.tolerance import between

Floats = NDArray[np.float64]

REFERENCE_C = 25.0
WIRE_C = 20.0
"""Tables of wire print resistance at this temperature."""


@dataclass(frozen=True)
class ResistorAt:
    """At one temperature: its resistance in ohms, a float or an array (batch,)."""

    ohms: Floats | float


@dataclass(frozen=True)
class ResistorLaw:
    """ohms at 25 degrees Celsius and tempco_per_K of that value; floats or arrays (samples,)."""

    ohms: Floats | float
    tempco_per_K: Floats | float = 0.0

    def at(self, junction_C: Floats | float) -> ResistorAt:
        """The resistance at a temperature."""
        rise = np.asarray(junction_C, dtype=float) - REFERENCE_C
        return ResistorAt(self.ohms * (1 + self.tempco_per_K * rise))


@dataclass(frozen=True)
class ResistorModel:
    """The typical law and its relative tolerance."""

    typical: ResistorLaw
    tolerance: float
    notes: tuple[str, ...] = ()

    def sample(self, a: Floats, b: Floats, c: Floats) -> ResistorLaw:  # noqa: ARG002  as every model
        """Sampled parts from standard scores, shape (samples,): ``a`` moves the value."""
        share = between(a, 1 - self.tolerance, 1.0, 1 + self.tolerance)
        return ResistorLaw(self.typical.ohms * share, self.typical.tempco_per_K)


def resistor_model(_reference: str, part: Resistor | Lead) -> ResistorModel:
    """The law of a resistor or a lead; a lead's value and coefficient are those at 20 C."""
    tempco = part.tempco_ppm_per_K * 1e-6
    value = part.value_ohm
    if isinstance(part, Lead):
        warmer = 1 + tempco * (REFERENCE_C - WIRE_C)
        value, tempco = value * warmer, tempco / warmer
    return ResistorModel(ResistorLaw(value, tempco), part.tolerance_percent / 100)
