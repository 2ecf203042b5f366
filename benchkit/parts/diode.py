"""The junction law: Shockley with ideality and series resistance, and reverse leakage.

    I = Is (exp((V - I Rs) / (n Vt)) - 1),   Vt = k T / q

solved for I by the Wright omega function (Corless and Jeffrey 2002; the same closed form is the
Lambert W solution of Banwell and Jayakumar 2000). The saturation current follows temperature as in
SPICE: Is(T) = Is(T0) (T/T0)^(XTI/n) exp(-(Eg/n k)(1/T - 1/T0)). Leakage is a law of its own,
because a real junction leaks far more than Is: a power of the voltage, doubling every so many
kelvin (common practice, no source). Without leakage points Is is all that flows in reverse.

Validity: -80 to 250 degrees Celsius; breakdown is not part of the law (the rating says where).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.tolerance import between

Floats = NDArray[np.float64]

BOLTZMANN_OVER_CHARGE = 8.617333262e-5
"""k/q in volts per kelvin (CODATA 2018, exact constants)."""
ZERO_C = 273.15
REFERENCE_C = 25.0
LEAST_SERIES_OHM = 1e-6


def thermal_voltage(junction_C: Floats | float) -> Floats:
    """k T / q in volts."""
    return BOLTZMANN_OVER_CHARGE * (np.asarray(junction_C, dtype=float) + ZERO_C)


@dataclass(frozen=True)
class DiodeLaw:
    """Parameters at 25 degrees Celsius; any of them may be an array over samples.

    saturation_A, ideality, series_ohm: the forward law. bandgap_V, exponent: its temperature.
    leakage_A at leakage_V and 25 C, with leakage_power and leakage_doubles_K.
    """

    saturation_A: Floats | float
    ideality: Floats | float
    series_ohm: Floats | float
    bandgap_V: float
    exponent: float
    leakage_A: Floats | float = 0.0
    leakage_V: float = 1.0
    leakage_power: float = 0.5
    leakage_doubles_K: float = 10.0

    def log_saturation(self, junction_C: Floats | float) -> Floats:
        """Natural logarithm of the saturation current in amperes at a junction temperature."""
        kelvin = np.asarray(junction_C, dtype=float) + ZERO_C
        reference = REFERENCE_C + ZERO_C
        n = np.asarray(self.ideality)
        return (
            np.log(self.saturation_A)
            + self.exponent / n * np.log(kelvin / reference)
            - self.bandgap_V / (n * BOLTZMANN_OVER_CHARGE) * (1 / kelvin - 1 / reference)
        )

    def forward_V(self, current_A: Floats | float, junction_C: Floats | float) -> Floats:
        """Drop at a forward current, both broadcast together. Leakage is left out (forward)."""
        current = np.asarray(current_A, dtype=float)
        scale = self.ideality * thermal_voltage(junction_C)
        ratio = np.log(np.maximum(current, 1e-300)) - self.log_saturation(junction_C)
        volts: Floats = scale * np.logaddexp(ratio, 0.0) + current * self.series_ohm
        return volts

    def current(self, volts: Floats, junction_C: Floats | float) -> tuple[Floats, Floats]:
        """Current in amperes from anode to cathode and its slope in siemens, at ``volts``."""
        from scipy.special import wrightomega

        log_is = self.log_saturation(junction_C)
        scale = self.ideality * thermal_voltage(junction_C)
        resistance = np.maximum(self.series_ohm, LEAST_SERIES_OHM)
        saturation = np.exp(log_is)
        unit = scale / resistance
        omega = wrightomega(log_is - np.log(unit) + (volts + saturation * resistance) / scale)
        current = unit * omega - saturation
        # One Newton step on the law itself restores what that difference cancels near zero.
        inner = np.minimum((volts - current * resistance) / scale, 700.0)
        current -= (current - saturation * np.expm1(inner)) / (
            1 + saturation * np.exp(inner) / unit
        )
        slope = omega / (1 + omega) / resistance
        reverse = np.minimum(volts, 0.0)
        height = (
            self.leakage_A
            * np.exp2((np.asarray(junction_C) - REFERENCE_C) / self.leakage_doubles_K)
            * ((1 - reverse) / (1 + self.leakage_V)) ** self.leakage_power
        )
        # Leakage takes the place of the saturation current. A tenth of that always stays, so that
        # the current never falls while the voltage rises.
        least = -0.9 * saturation / (1 + saturation / unit)
        excess = np.where(np.asarray(self.leakage_A) > 0, height - saturation, 0.0)
        kept = np.maximum(excess, least)
        fade = -np.expm1(reverse / scale)
        growth = np.where(excess > least, height * self.leakage_power / (1 - reverse), 0.0)
        leak_slope = np.where(
            volts < 0, kept * np.exp(reverse / scale) / scale + growth * fade, 0.0
        )
        return current - kept * fade, slope + leak_slope


@dataclass(frozen=True)
class DiodeModel:
    """A typical law, the law of the sheet's maxima, and notes on what had to be assumed."""

    typical: DiodeLaw
    worst: DiodeLaw
    notes: tuple[str, ...]

    def sample(self, forward_score: Floats, leakage_score: Floats) -> DiodeLaw:
        """The law of sampled parts: scores of 0 are typical, +3 the sheet's maximum."""
        typ, most = self.typical, self.worst
        log_is = between(
            forward_score,
            2 * float(np.log(typ.saturation_A)) - float(np.log(most.saturation_A)),
            float(np.log(typ.saturation_A)),
            float(np.log(most.saturation_A)),
        )
        rs_typ, rs_most = float(typ.series_ohm), float(most.series_ohm)
        series = between(forward_score, 2 * rs_typ - rs_most, rs_typ, rs_most)
        ratio = float(most.leakage_A) / float(typ.leakage_A) if typ.leakage_A else 1.0
        return DiodeLaw(
            np.exp(log_is), typ.ideality, np.maximum(series, LEAST_SERIES_OHM),
            typ.bandgap_V, typ.exponent,
            typ.leakage_A * np.exp(between(leakage_score, -np.log(ratio), 0, np.log(ratio))),
            typ.leakage_V, typ.leakage_power, typ.leakage_doubles_K,
        )  # fmt: skip
