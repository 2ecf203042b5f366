"""From a bipolar transistor's datasheet points to its law, its spread, and what was assumed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.errors import InputError
from benchkit.files.parts.bipolars import BaseEmitterPoint, Bipolar
from benchkit.parts.bipolar import LEAKAGE_DOUBLES_K, BipolarLaw
from benchkit.parts.diode import REFERENCE_C, thermal_voltage
from benchkit.parts.knee import KneeLaw
from benchkit.parts.tolerance import between

Floats = NDArray[np.float64]

USUAL_REVERSE_GAIN = 1.0
"""SPICE's default BR."""
LEAST_COLLECTOR_OHM = 1e-3
"""Bond wires and pins."""
BREAKDOWN_OVER_RATING, BREAKDOWN_TEST_A = 1.3, 10e-6
"""Where a base-emitter junction breaks down whose sheet gives VEBO only: a rating of 5 or 6 V
means some 6.5 to 8 V (common practice, no source)."""
KNEE_SCALE_V, KNEE_OHM, KNEE_TEMPCO_V_PER_K = 0.03, 20.0, 3e-3
"""An avalanche knee of a small junction at 6 to 8 V (common practice, no source)."""
REMARKABLE_V = 0.02
MOST_IDEALITY = 3.0
"""A rise of VBE beyond this many times the law's, with resistance or without, is a mistake."""


@dataclass(frozen=True)
class BipolarModel:
    """The typical law and its limits at 25 C.

    worst_shift_V: how far VBE's maximum is above typical. collector_spread_ohm: what the collector
    resistance grows by to where VCE(sat) is at its maximum. leakage_ratio: ICBO's maximum over
    typical.
    """

    typical: BipolarLaw
    gain_min: float
    gain_max: float
    worst_shift_V: float
    collector_spread_ohm: float
    breakdown_min_V: float
    leakage_ratio: float
    notes: tuple[str, ...]

    def sample(self, a: Floats, b: Floats, c: Floats) -> BipolarLaw:
        """Sampled parts from standard scores, shape (samples,).

        a: +3 is the lowest gain and the highest VCE(sat). b: +3 is the highest VBE. c: +3 is the
        highest breakdown voltage, and the highest leakage.
        """
        typ, knee = self.typical, self.typical.breakdown
        middle = float(np.log(typ.forward_gain))
        gain = between(a, float(np.log(self.gain_max)), middle, float(np.log(self.gain_min)))
        spread, ohm = self.collector_spread_ohm, float(typ.collector_ohm)
        collector = between(a, ohm - spread, ohm, ohm + spread)
        shift = between(b, -self.worst_shift_V, 0.0, self.worst_shift_V)
        volts = float(knee.volts_V)
        log_leak = float(np.log(self.leakage_ratio))
        return BipolarLaw(
            typ.saturation_A * np.exp(-shift / thermal_voltage(REFERENCE_C)),
            np.exp(gain), typ.reverse_gain, np.maximum(collector, LEAST_COLLECTOR_OHM),
            KneeLaw(
                between(c, self.breakdown_min_V, volts, 2 * volts - self.breakdown_min_V),
                knee.test_A, knee.scale_V, knee.series_ohm, knee.tempco_V_per_K,
            ),
            typ.leakage_A * np.exp(between(c, -log_leak, 0.0, log_leak)),
        )  # fmt: skip


def bipolar_model(reference: str, part: Bipolar) -> BipolarModel:
    """Fit the law to a sheet's points.

    Raises InputError naming ``parts.<reference>`` and the key when they contradict each other.
    """
    notes: list[str] = []
    saturation_A, shift = _base_emitter(reference, part, notes)
    gain = part.gain.middle
    if part.gain.typ is None:
        notes.append(
            f"{reference}: no typical gain is printed; {gain:.3g}, the geometric middle of its "
            "window, is taken"
        )
    reverse_gain, collector_ohm, spread = _saturation(reference, part, notes)
    knee, least = _breakdown(reference, part, notes)
    leakage_A, ratio = _leakage(reference, part, notes)
    law = BipolarLaw(saturation_A, gain, reverse_gain, collector_ohm, knee, leakage_A)
    return BipolarModel(
        law, part.gain.min, part.gain.max, shift, spread, least, ratio, tuple(notes)
    )


def _base_emitter(reference: str, part: Bipolar, notes: list[str]) -> tuple[float, float]:
    """Saturation current from VBE at the smallest current, where resistance adds least."""
    points = sorted(part.base_emitter, key=lambda point: point.current_A)
    scale = float(thermal_voltage(REFERENCE_C))
    first, last = points[0], points[-1]
    if last is not first:
        _consistent(f"parts.{reference}.base_emitter", first, last, scale)
        rise = scale * float(np.log(last.current_A / first.current_A))
        extra = last.typ_V - first.typ_V - rise
        if abs(extra) > REMARKABLE_V:
            notes.append(
                f"{reference}: no junction passes through both base_emitter points; the one at "
                f"{first.current_A:g} A is met, and the law is off by {1000 * extra:+.0f} mV at "
                f"{last.current_A:g} A"
            )
    shifts = [point.max_V - point.typ_V for point in points if point.max_V is not None]
    if not shifts:
        notes.append(
            f"{reference}: no maximum base-emitter voltage is printed; its spread is not known"
        )
    return float(first.current_A * np.exp(-first.typ_V / scale)), max(shifts, default=0.0)


def _consistent(name: str, low: BaseEmitterPoint, high: BaseEmitterPoint, scale: float) -> None:
    if high.current_A == low.current_A:
        raise InputError(f"{name} has two points at {low.current_A:g} A: give one")
    rise = scale * float(np.log(high.current_A / low.current_A))
    found = high.typ_V - low.typ_V
    if not 0.5 * rise <= found <= MOST_IDEALITY * rise + 0.1:
        raise InputError(
            f"{name} contradicts itself: it rises by {1000 * found:.0f} mV from "
            f"{low.current_A:g} A to {high.current_A:g} A; a junction at 25 C rises by about "
            f"{1000 * rise:.0f} mV between them"
        )


def _saturation(reference: str, part: Bipolar, notes: list[str]) -> tuple[float, float, float]:
    """Reverse gain, collector resistance and its spread that meet VCE(sat)."""
    point, gain = part.saturation, part.gain.middle
    name = f"parts.{reference}.saturation"
    spare = point.base_A - point.collector_A / gain
    if spare <= 0:
        raise InputError(
            f"{name} contradicts parts.{reference}.gain: {point.base_A:g} A into the base with a "
            f"gain of {gain:.3g} is not enough for {point.collector_A:g} A; saturation is printed "
            "for a base that is overdriven"
        )
    if point.base_A * part.gain.min <= point.collector_A:
        notes.append(
            f"{reference}: at its lowest gain of {part.gain.min:g} the base current of its "
            "saturation point is not enough; such boards are taken not to saturate there"
        )
    volts = point.typ_V if point.typ_V is not None else point.max_V
    assert volts is not None
    if point.typ_V is None:
        notes.append(
            f"{reference}: no typical saturation voltage is printed; the maximum is taken of all"
        )
    factor = float(np.exp(min(volts / float(thermal_voltage(REFERENCE_C)), 100.0)))
    # From the closed form of BipolarLaw.saturation_V, solved for the reverse gain.
    lower = factor * spare - point.base_A
    needed = (point.base_A + point.collector_A) / lower if lower > 0 else float("inf")
    if needed > gain:
        least = _ebers_moll_V(part, gain, gain)
        raise InputError(
            f"{name} contradicts parts.{reference}.gain: {volts:g} V is below {least:.2g} V, what "
            f"a transistor with a gain of {gain:.3g} can saturate to at these currents; check "
            "its voltage and both currents"
        )
    reverse_gain = max(needed, USUAL_REVERSE_GAIN)
    rest = (volts - _ebers_moll_V(part, gain, reverse_gain)) / point.collector_A
    ohm = max(rest, LEAST_COLLECTOR_OHM)
    if point.max_V is None or point.typ_V is None:
        return reverse_gain, ohm, 0.0
    weak = _ebers_moll_V(part, part.gain.min, reverse_gain)
    most = (point.max_V - weak) / point.collector_A if np.isfinite(weak) else ohm
    return reverse_gain, ohm, max(most - ohm, 0.0)


def _ebers_moll_V(part: Bipolar, gain: float, reverse_gain: float) -> float:
    """VCE(sat) of the bare law at the currents of the sheet's point."""
    law = BipolarLaw(1e-15, gain, reverse_gain, 0.0, _knee(1.0, 1e-5))
    return float(law.saturation_V(part.saturation.collector_A, part.saturation.base_A))


def _knee(volts_V: float, test_A: float) -> KneeLaw:
    return KneeLaw(volts_V, test_A, KNEE_SCALE_V, KNEE_OHM, KNEE_TEMPCO_V_PER_K)


def _breakdown(reference: str, part: Bipolar, notes: list[str]) -> tuple[KneeLaw, float]:
    rating = part.emitter_base_max_V
    if part.breakdown is None:
        volts = BREAKDOWN_OVER_RATING * rating
        notes.append(
            f"{reference}: no base-emitter breakdown is printed; it is taken to be at {volts:.3g} "
            f"V, {BREAKDOWN_OVER_RATING:g} times its rating of {rating:g} V"
        )
        return _knee(volts, BREAKDOWN_TEST_A), rating
    if part.breakdown.typ_V < rating:
        raise InputError(
            f"parts.{reference}.breakdown.typ_V is {part.breakdown.typ_V:g}: it must not be below "
            f"emitter_base_max_V {rating:g}, which every part stands"
        )
    return _knee(part.breakdown.typ_V, part.breakdown.current_A), rating


def _leakage(reference: str, part: Bipolar, notes: list[str]) -> tuple[float, float]:
    """ICBO at 25 C and its maximum over typical."""
    point = part.leakage
    if point is None:
        notes.append(f"{reference}: no collector leakage is given; none but its law's is counted")
        return 0.0, 1.0
    typ = point.typ_A if point.typ_A is not None else point.max_A
    assert typ is not None
    if point.typ_A is None:
        notes.append(f"{reference}: no typical collector leakage is printed; the maximum is taken")
    cooler = 2.0 ** (-(point.junction_C - REFERENCE_C) / LEAKAGE_DOUBLES_K)
    return typ * cooler, 1.0 if point.max_A is None else point.max_A / typ
