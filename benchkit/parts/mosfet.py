"""The channel law: the charge-based EKV model of a long channel, with series resistance.

    I = 2 n b Vt^2 [ L((Vp - Vs)/2Vt)^2 - L((Vp - Vd)/2Vt)^2 ],   L(x) = ln(1 + exp(x)),
    Vp = (Vg - VT)/n, voltages from the body, which a discrete part ties to its source

(Enz, Krummenacher and Vittoz, "An analytical MOS transistor model valid in all regions of
operation", 1995). It is symmetric in drain and source, so the third quadrant, where a pass switch
works, needs no case of its own, and it passes smoothly through threshold. Both the channel and the
drift region behind it conduct by carriers whose mobility falls with a power of T (lattice
scattering; Sze, Physics of Semiconductor Devices), so one exponent serves the gain factor b and the
series resistance; the sheet's hot on-resistance fixes it. The threshold falls by 2 mV/K (common
practice, no source).

Voltages here are magnitudes, as for an N-channel part; the circuit mirrors them for a P-channel.
Validity: on-resistance within its sheet's gate voltages; no avalanche, no velocity saturation.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from benchkit.errors import InputError
from benchkit.files.parts.mosfets import Mosfet, OnResistancePoint
from benchkit.parts.diode import REFERENCE_C, ZERO_C, DiodeAt, DiodeLaw, DiodeModel
from benchkit.parts.diode import thermal_voltage as _vt
from benchkit.parts.diode_points import junction_model, with_leakage
from benchkit.parts.tolerance import between

Floats = NDArray[np.float64]

SLOPE_FACTOR = 1.2
"""n of the model: a usual value for a thick gate oxide; it matters below threshold only."""
THRESHOLD_FALL_V_PER_K = 0.002
EXPONENT = 1.8
"""Where no hot on-resistance is printed: between 1.5, of acoustic phonons alone, and 2.2, measured
for holes in pure silicon (Sze); it makes an on-resistance of 1.6 times at 125 C."""
EXPONENTS = (0.3, 4.0)
"""What a printed hot on-resistance may ask for and still be believed."""
LEAST_SERIES_OHM = 1e-7


@dataclass(frozen=True)
class ChannelAt:
    """A channel at its junction temperature; its fields are numbers or arrays (batch,).

    unit_A: 2 n b Vt^2. twice_vt_V: 2 Vt.
    """

    unit_A: Floats | float
    threshold_V: Floats | float
    twice_vt_V: Floats | float

    def current(self, gate_V: Floats, drain_V: Floats) -> tuple[Floats, Floats, Floats]:
        """Drain current of the bare channel (without series resistance) and its slopes.

        gate_V and drain_V are measured from the source, shape (batch,). Returns (amperes, dI/dVg,
        dI/dVd).
        """
        forward = (gate_V - self.threshold_V) / (SLOPE_FACTOR * self.twice_vt_V)
        f, f_slope = _softplus(forward)
        r, r_slope = _softplus(forward - drain_V / self.twice_vt_V)
        unit = 2 * self.unit_A / self.twice_vt_V
        f_slope *= f
        r_slope *= r
        amps = self.unit_A * ((f - r) * (f + r))
        return amps, (unit / SLOPE_FACTOR) * (f_slope - r_slope), unit * r_slope


@dataclass(frozen=True)
class MosfetAt:
    """A MOSFET at its junction temperature: channel behind series resistance, and body diode."""

    channel: ChannelAt
    series_ohm: Floats | float
    body: DiodeAt


@dataclass(frozen=True)
class MosfetLaws:
    """Channel and body diode of one part."""

    channel: ChannelLaw
    body: DiodeLaw

    def at(self, junction_C: Floats | float) -> MosfetAt:
        """The laws at junction temperatures, shape (batch,) or one number."""
        channel, body = self.channel.at(junction_C), self.body.at(junction_C)
        return MosfetAt(channel, self.channel.series(junction_C), body)


@dataclass(frozen=True)
class ChannelLaw:
    """Parameters at 25 C; gain_A_per_V2, threshold_V and series_ohm may be arrays of samples."""

    gain_A_per_V2: Floats | float
    threshold_V: Floats | float
    series_ohm: Floats | float
    exponent: float = EXPONENT

    def series(self, junction_C: Floats | float) -> Floats:
        """Series resistance in ohms at a junction temperature."""
        ratio = (np.asarray(junction_C, dtype=float) + ZERO_C) / (REFERENCE_C + ZERO_C)
        ohms: Floats = np.asarray(self.series_ohm) * ratio**self.exponent
        return ohms

    def at(self, junction_C: Floats | float) -> ChannelAt:
        """The law at junction temperatures, shape (batch,) or one number."""
        vt = _vt(junction_C)
        ratio = (np.asarray(junction_C, dtype=float) + ZERO_C) / (REFERENCE_C + ZERO_C)
        threshold = self.threshold_V - THRESHOLD_FALL_V_PER_K * (
            np.asarray(junction_C, dtype=float) - REFERENCE_C
        )
        unit = 2 * SLOPE_FACTOR * np.asarray(self.gain_A_per_V2) * ratio**-self.exponent * vt**2
        return ChannelAt(unit, threshold, 2 * vt)

    def on_resistance(
        self, gate_V: float, current_A: float, junction_C: float = REFERENCE_C
    ) -> Floats:
        """Drop over current, in ohms, of channel and series resistance at ``current_A``."""
        drain = np.full(np.shape(self.gain_A_per_V2), 1e-3)
        gate = np.full_like(drain, gate_V)
        channel = self.at(junction_C)
        for _ in range(60):
            amps, _, slope = channel.current(gate, drain)
            step = np.clip((current_A - amps) / np.maximum(slope, 1e-12), -0.5, 0.5)
            drain = np.clip(drain + step, 0.0, 100.0)
            if np.all(np.abs(step) < 1e-12):
                break
        return drain / current_A + self.series(junction_C)


@dataclass(frozen=True)
class MosfetModel:
    """Typical channel and its spread, body diode, and notes on what had to be assumed."""

    typical: ChannelLaw
    resistance_ratio: float
    """Printed maximum over typical on-resistance."""
    threshold_min_V: float
    threshold_max_V: float
    body: DiodeModel
    notes: tuple[str, ...]

    def sample(self, a: Floats, b: Floats, c: Floats) -> MosfetLaws:
        """Sampled parts: scores of 0 are typical, -3 and +3 the sheet's limits.

        a: the whole on-resistance. b: threshold. c: the body diode, drop and leakage together.
        """
        log_ratio = float(np.log(self.resistance_ratio))
        scale = np.exp(between(a, -log_ratio, 0.0, log_ratio))
        middle = float(self.typical.threshold_V)
        threshold = between(b, self.threshold_min_V, middle, self.threshold_max_V)
        channel = ChannelLaw(
            self.typical.gain_A_per_V2 / scale, threshold,
            self.typical.series_ohm * scale, self.typical.exponent,
        )  # fmt: skip
        return MosfetLaws(channel, self.body.sample(c, c, c))


def mosfet_model(reference: str, part: Mosfet) -> MosfetModel:
    """Fit channel, spread and body diode to a sheet's points.

    Raises InputError naming ``parts.<reference>`` when the points contradict each other.
    """
    name = f"parts.{reference}.on_resistance"
    cold = sorted((p for p in part.on_resistance if p.junction_C == REFERENCE_C),
                  key=lambda p: p.gate_V)  # fmt: skip
    if len({p.gate_V for p in cold}) < 2:
        raise InputError(f"{name} needs points at two gate voltages or more at junction_C = 25")
    for low, high in pairwise(cold):
        if high.typ_ohm >= low.typ_ohm and high.gate_V > low.gate_V:
            raise InputError(
                f"{name} contradicts itself: {high.typ_ohm:g} ohm at {high.gate_V:g} V is not "
                f"below {low.typ_ohm:g} ohm at {low.gate_V:g} V; a channel's resistance falls "
                "with gate voltage"
            )
    if cold[0].gate_V <= part.threshold.middle_V:
        raise InputError(
            f"{name} has a point at gate_V {cold[0].gate_V:g}, not above the threshold of "
            f"{part.threshold.middle_V:g} V: on-resistance is printed for a gate that is driven"
        )
    gain, extrapolated, series = _fit_cold(cold, part)
    if series < 0 or gain <= 0:
        raise InputError(
            f"{name} contradicts parts.{reference}.threshold: between {cold[0].gate_V:g} V and "
            f"{cold[-1].gate_V:g} V the resistance falls further than a channel with a threshold "
            f"of {part.threshold.middle_V:g} V can; check the points, or give the typical threshold"
        )
    notes = []
    law = ChannelLaw(gain, extrapolated, max(series, LEAST_SERIES_OHM))
    hot = [p for p in part.on_resistance if p.junction_C != REFERENCE_C]
    if hot:
        law = _fit_hot(name, law, hot)
    else:
        notes.append(
            f"{reference}: no hot on-resistance is given; it is taken to rise with the absolute "
            f"temperature to the power {EXPONENT:g}, by a factor of 1.6 or so at 125 C"
        )
    ratios = [p.max_ohm / p.typ_ohm for p in part.on_resistance if p.max_ohm]
    if not ratios:
        notes.append(f"{reference}: no maximum on-resistance is printed; its spread is not known")
    shift = extrapolated - part.threshold.middle_V
    body = junction_model(reference, part.body_diode, "silicon", "body_diode")
    if part.leakage:
        body = with_leakage(reference, part.leakage, body)
    return MosfetModel(
        law, max(ratios, default=1.0), part.threshold.min_V + shift,
        part.threshold.max_V + shift, body, (*notes, *body.notes),
    )  # fmt: skip


def _fit_cold(cold: Sequence[OnResistancePoint], part: Mosfet) -> tuple[float, float, float]:
    """Gain, extrapolated threshold and series resistance, by fixed-point iteration.

    The printed threshold is where a few hundred microamperes flow, below the extrapolated
    threshold of the law; and at its test current the channel's drop takes some overdrive.
    """
    vt = float(_vt(REFERENCE_C))
    threshold, series = part.threshold.middle_V, 0.0
    gain = 1.0
    volts = np.array([p.gate_V for p in cold])
    amps = np.array([p.current_A for p in cold])
    ohms = np.array([p.typ_ohm for p in cold])
    for _ in range(200):
        drop = np.maximum(ohms - series, 0.0) * amps
        overdrive = np.maximum(volts - threshold - 0.5 * SLOPE_FACTOR * drop, 0.05)
        design = np.column_stack([1 / overdrive, np.ones_like(overdrive)]) / ohms[:, None]
        (inverse, series_new), *_ = np.linalg.lstsq(design, np.ones_like(ohms))
        if inverse <= 0:
            return -1.0, threshold, series
        gain = 1 / float(inverse)
        q = np.sqrt(part.threshold.current_A / (2 * SLOPE_FACTOR * gain * vt**2))
        threshold_new = part.threshold.middle_V - SLOPE_FACTOR * 2 * vt * float(
            np.log(np.expm1(min(q, 500.0)))
        )
        moved = abs(threshold_new - threshold) + abs(float(series_new) - series)
        threshold, series = threshold_new, float(series_new)
        if moved < 1e-12:
            break
    return gain, threshold, series


def _fit_hot(name: str, law: ChannelLaw, points: Sequence[OnResistancePoint]) -> ChannelLaw:
    """The exponent of temperature that meets the points away from 25 C, the mean of all."""
    from scipy.optimize import brentq

    found = []
    for point in points:

        def excess(exponent: float, point: OnResistancePoint = point) -> float:
            warm = replace(law, exponent=exponent)
            ohms = warm.on_resistance(point.gate_V, point.current_A, point.junction_C)
            return float(ohms) - point.typ_ohm

        low, high = (excess(end) for end in EXPONENTS)
        if low * high > 0:
            cold = float(law.on_resistance(point.gate_V, point.current_A))
            raise InputError(
                f"{name} contradicts itself: {point.typ_ohm:g} ohm at {point.junction_C:g} C does "
                f"not fit {cold:.3g} ohm at 25 C; a channel's resistance rises with temperature, "
                "mostly by a factor of 1.3 to 1.9 at 125 C"
            )
        found.append(brentq(excess, *EXPONENTS))
    return replace(law, exponent=float(np.mean(found)))


def _softplus(x: Floats) -> tuple[Floats, Floats]:
    """ln(1 + exp(x)) and its derivative, to full relative precision in both tails."""
    small = np.exp(-np.abs(x))
    value = np.maximum(x, 0.0) + np.log1p(small)
    return value, np.where(x >= 0, 1.0, small) / (1 + small)
