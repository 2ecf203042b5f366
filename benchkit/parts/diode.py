"""The junction law: Shockley with ideality and series resistance, leakage, and breakdown.

    I = Is (exp((V - I Rs) / (n Vt)) - 1),   Vt = k T / q

solved for I by the Wright omega function (Corless and Jeffrey 2002; the same closed form is the
Lambert W solution of Banwell and Jayakumar 2000). The saturation current follows temperature as in
SPICE: Is(T) = Is(T0) (T/T0)^(XTI/n) exp(-(Eg/n k)(1/T - 1/T0)). Leakage is a law of its own,
because a real junction leaks far more than Is: a power of the voltage, doubling every so many
kelvin (common practice, no source). Without leakage points Is is all that flows in reverse.
Breakdown, for the parts that are made to break down, is the law of ``benchkit.parts.knee``.

Validity: -80 to 250 degrees Celsius; without a knee there is no breakdown in the law (the rating
says where).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.knee import KneeAt, KneeLaw
from benchkit.parts.omega import omega
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
class LeakageAt:
    """Leakage at a junction temperature: ``unit_A`` (1 + V)^power at the reverse voltage V.

    replaced_A: the saturation current whose place it takes. least_A: below zero, how far it may
    reduce that: a tenth always stays, so that the current never falls while the voltage rises.
    """

    unit_A: Floats | float
    power: float
    replaced_A: Floats | float
    least_A: Floats | float
    scale_V: Floats | float

    def current(self, volts: Floats) -> tuple[Floats, Floats]:
        """Current in amperes from anode to cathode beside the forward law's, and its slope."""
        reverse = np.minimum(volts, 0.0)
        if not reverse.any():
            return np.zeros(volts.shape), np.zeros(volts.shape)
        scaled = reverse / self.scale_V
        fade = -np.expm1(scaled)
        depth = 1 - reverse
        height = self.unit_A * depth**self.power
        kept = np.maximum(height - self.replaced_A, self.least_A)
        growth = height * (self.power / depth) * (kept > self.least_A)
        slope = kept * np.exp(scaled) / self.scale_V + growth * fade
        return -kept * fade, slope * (volts < 0)


@dataclass(frozen=True)
class DiodeAt:
    """A diode at its junction temperature; its fields are numbers or arrays (batch,).

    log_saturation: natural logarithm of saturation_A. scale_V: ideality times kT/q. share:
    saturation current times series resistance, in units of scale_V; log_share its logarithm.
    """

    log_saturation: Floats | float
    saturation_A: Floats | float
    scale_V: Floats | float
    series_ohm: Floats | float
    share: Floats | float
    log_share: Floats | float
    leakage: LeakageAt | None = None
    knee: KneeAt | None = None

    def current(self, volts: Floats) -> tuple[Floats, Floats]:
        """Current in amperes from anode to cathode and its slope in siemens, shape (batch,)."""
        # With y the inner junction's voltage in units of scale_V, y + share (exp(y) - 1) = v, so
        # that w = share exp(y) is omega(log_share + share + v) and y = share + v - w.
        v = volts / self.scale_V
        shifted = v + self.share
        w = omega(shifted + self.log_share, 1)
        # y lies between 0 and v, which rounding must not make untrue near zero. One Newton step
        # on the law itself restores what the difference cancels there.
        y = np.clip(shifted - w, np.minimum(v, 0.0), np.maximum(v, 0.0))
        grown = self.share * np.expm1(y)
        inner = grown + self.share
        drop = grown - inner * ((y + grown - v) / (1 + inner))
        current = drop * (self.scale_V / self.series_ohm)
        slope = w / ((1 + w) * self.series_ohm)
        if self.leakage is not None:
            more, steeper = self.leakage.current(volts)
            current += more
            slope += steeper
        if self.knee is not None:
            more, steeper = self.knee.current(-volts)
            current -= more
            slope += steeper
        return current, slope


@dataclass(frozen=True)
class DiodeLaw:
    """Parameters at 25 degrees Celsius; any of them may be an array over samples.

    saturation_A, ideality, series_ohm: the forward law. bandgap_V, exponent: its temperature.
    leakage_A at leakage_V and 25 C, with leakage_power and leakage_doubles_K. knee: breakdown.
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
    knee: KneeLaw | None = None

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

    def at(self, junction_C: Floats | float) -> DiodeAt:
        """The law at junction temperatures, shape (batch,) or one number."""
        log_is = self.log_saturation(junction_C)
        saturation = np.exp(log_is)
        scale = self.ideality * thermal_voltage(junction_C)
        series = np.maximum(self.series_ohm, LEAST_SERIES_OHM)
        share = saturation * series / scale
        leakage = None
        if np.any(np.asarray(self.leakage_A) > 0):
            warmer = np.asarray(junction_C, dtype=float) - REFERENCE_C
            unit = self.leakage_A * np.exp2(warmer / self.leakage_doubles_K)
            unit = unit / (1 + self.leakage_V) ** self.leakage_power
            replaced = saturation * (np.asarray(self.leakage_A) > 0)
            leakage = LeakageAt(
                unit, self.leakage_power, replaced, -0.9 * saturation / (1 + share), scale
            )
        knee = None if self.knee is None else self.knee.at(junction_C)
        log_share = log_is + np.log(series / scale)
        return DiodeAt(log_is, saturation, scale, series, share, log_share, leakage, knee)


@dataclass(frozen=True)
class DiodeModel:
    """A typical law, the law of the sheet's maxima, and notes on what had to be assumed."""

    typical: DiodeLaw
    worst: DiodeLaw
    notes: tuple[str, ...]
    knee_min_V: float = 0.0
    knee_max_V: float = 0.0
    """The breakdown voltage's window, where the typical law has a knee."""

    def sample(self, a: Floats, b: Floats, c: Floats) -> DiodeLaw:
        """The law of sampled parts: scores of 0 are typical, +3 the sheet's maximum.

        a: forward drop. b: leakage. c: breakdown voltage, where there is a knee.
        """
        typ, most = self.typical, self.worst
        log_is = between(
            a,
            2 * float(np.log(typ.saturation_A)) - float(np.log(most.saturation_A)),
            float(np.log(typ.saturation_A)),
            float(np.log(most.saturation_A)),
        )
        rs_typ, rs_most = float(typ.series_ohm), float(most.series_ohm)
        series = between(a, 2 * rs_typ - rs_most, rs_typ, rs_most)
        ratio = float(most.leakage_A) / float(typ.leakage_A) if typ.leakage_A else 1.0
        leakage = typ.leakage_A * np.exp(between(b, -np.log(ratio), 0, np.log(ratio)))
        knee = typ.knee
        if knee is not None:
            volts = between(c, self.knee_min_V, float(knee.volts_V), self.knee_max_V)
            knee = replace(knee, volts_V=volts)
        return replace(
            typ, saturation_A=np.exp(log_is), series_ohm=np.maximum(series, LEAST_SERIES_OHM),
            leakage_A=leakage, knee=knee,
        )  # fmt: skip
