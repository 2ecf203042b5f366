"""The bipolar law: Ebers and Moll's, with breakdown of the base-emitter junction and leakage.

In transport form, for an NPN (a PNP is its mirror):

    If = Is (exp(Vbe/Vt) - 1),  Ir = Is (exp(Vbc/Vt) - 1),  Vt = k T / q
    Ic = If - Ir - Ir/Br,       Ib = If/Bf + Ir/Br

(J. J. Ebers and J. L. Moll, "Large-signal behavior of junction transistors", Proc. IRE 42, 1954;
the form is that of I. Getreu, "Modeling the Bipolar Transistor", 1976.) Temperature is SPICE's:
Is(T) = Is(T0) (T/T0)^XTI exp(-(Eg q/k)(1/T - 1/T0)) and B(T) = B(T0) (T/T0)^XTB. Beside that a
current out of the base where the emitter is far above it (``benchkit.parts.knee``), and collector
leakage ICBO that is all there from a few tens of millivolts on, I = ICBO tanh(Vcb/Vt), doubling
every 10 K (common practice, no source).

An exponential is continued linearly, in value and slope, where its junction's current would pass
CEILING_A: a solver's iteration goes there, an operating point does not. The collector's resistance
is not inside the law: the circuit adds it as a resistor of its own.

Validity: -80 to 150 degrees Celsius, up to the currents of the sheet's points. The gain does not
fall at small or large currents, there is no Early effect, no base resistance, and no breakdown of
the collector (the rating says where).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.diode import BOLTZMANN_OVER_CHARGE, REFERENCE_C, ZERO_C, thermal_voltage
from benchkit.parts.knee import KneeAt, KneeLaw

Floats = NDArray[np.float64]

BANDGAP_V, SATURATION_EXPONENT, GAIN_EXPONENT = 1.11, 3.0, 1.5
"""SPICE's EG and XTI, its defaults, and XTB, a usual value for silicon (its default is 0)."""
LEAKAGE_DOUBLES_K = 10.0
CEILING_A = 100.0

Six = tuple[Floats, Floats, Floats, Floats, Floats, Floats]


@dataclass(frozen=True)
class BipolarAt:
    """The law at one junction temperature; its fields are numbers or arrays (batch,).

    ceiling: the exponent at which a junction carries CEILING_A. forward_share, reverse_share: one
    over the gains. collector_ohm: of the resistor that belongs in front of the collector.
    """

    saturation_A: Floats | float
    scale_V: Floats | float
    ceiling: Floats | float
    forward_share: Floats | float
    reverse_share: Floats | float
    leakage_A: Floats | float
    collector_ohm: Floats | float
    breakdown: KneeAt

    def current(self, be_V: Floats, bc_V: Floats) -> Six:
        """Currents into collector and base in amperes, and their slopes in siemens.

        be_V, bc_V: base above emitter and above collector, shape (batch,). Returns ic, ib,
        d ic/d be_V, d ic/d bc_V, d ib/d be_V, d ib/d bc_V.
        """
        forward, by_be = self._junction(be_V)
        reverse, by_bc = self._junction(bc_V)
        broken, by_eb = self.breakdown.current(-be_V)
        leak, by_leak = self._leakage(bc_V)
        share = self.reverse_share
        collector = forward - reverse * (1 + share) - leak
        base = forward * self.forward_share + reverse * share - broken + leak
        return (
            collector, base, by_be, -by_bc * (1 + share) - by_leak,
            by_be * self.forward_share + by_eb, by_bc * share + by_leak,
        )  # fmt: skip

    def _junction(self, volts: Floats) -> tuple[Floats, Floats]:
        scaled = volts / self.scale_V
        kept = np.minimum(scaled, self.ceiling)
        growth = self.saturation_A * np.exp(kept)
        current = self.saturation_A * np.expm1(kept) + growth * (scaled - kept)
        return current, growth / self.scale_V

    def _leakage(self, bc_V: Floats) -> tuple[Floats, Floats]:
        """Leakage from base to collector: negative where the junction is blocked."""
        scaled = bc_V / self.scale_V
        tail = np.exp(-2 * np.abs(scaled))
        # 1 - tanh^2, to full relative precision in the tails too.
        slope = self.leakage_A * 4 * tail / (1 + tail) ** 2 / self.scale_V
        return self.leakage_A * np.tanh(scaled), slope


@dataclass(frozen=True)
class BipolarLaw:
    """Parameters at 25 degrees Celsius; any of them may be an array (samples,)."""

    saturation_A: Floats | float
    forward_gain: Floats | float
    reverse_gain: Floats | float
    collector_ohm: Floats | float
    breakdown: KneeLaw
    leakage_A: Floats | float = 0.0

    def at(self, junction_C: Floats | float) -> BipolarAt:
        """The law at junction temperatures, shape (batch,) or one number."""
        warm = np.asarray(junction_C, dtype=float)
        kelvin, reference = warm + ZERO_C, REFERENCE_C + ZERO_C
        log_is = (
            np.log(self.saturation_A)
            + SATURATION_EXPONENT * np.log(kelvin / reference)
            - BANDGAP_V / BOLTZMANN_OVER_CHARGE * (1 / kelvin - 1 / reference)
        )
        gain = (kelvin / reference) ** GAIN_EXPONENT
        return BipolarAt(
            np.exp(log_is), thermal_voltage(warm), np.log(CEILING_A) - log_is,
            1 / (self.forward_gain * gain), 1 / (self.reverse_gain * gain),
            self.leakage_A * np.exp2((warm - REFERENCE_C) / LEAKAGE_DOUBLES_K),
            self.collector_ohm, self.breakdown.at(warm),
        )  # fmt: skip

    def saturation_V(self, collector_A: float, base_A: float) -> Floats:
        """VCE at 25 C with both currents given, collector resistance included.

        Ebers and Moll's closed form; infinite where the gain does not reach the collector current.
        """
        spare = np.asarray(base_A - collector_A / self.forward_gain)
        inner = (collector_A + base_A * (1 + self.reverse_gain)) / (
            self.reverse_gain * np.where(spare > 0, spare, np.nan)
        )
        volts = thermal_voltage(REFERENCE_C) * np.log(inner) + collector_A * self.collector_ohm
        return np.where(spare > 0, volts, np.inf)
