"""The junction law: Shockley with ideality and series resistance, and reverse leakage.

    I = Is (exp((V - I Rs) / (n Vt)) - 1),   Vt = k T / q

solved for I by the Wright omega function (Corless and Jeffrey 2002; the same closed form is the
Lambert W solution of Banwell and Jayakumar 2000). The saturation current follows temperature as in
SPICE: Is(T) = Is(T0) (T/T0)^(XTI/n) exp(-(Eg/n k)(1/T - 1/T0)). Leakage is a law of its own,
because a real junction leaks far more than Is: a power of the voltage, doubling every so many
kelvin (common practice, no source).

Validity: -80 to 250 degrees Celsius; breakdown is not part of the law (the rating says where).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.errors import InputError
from benchkit.files.parts import Diode, ForwardPoint, LeakagePoint
from benchkit.parts.tolerance import between

Floats = NDArray[np.float64]

BOLTZMANN_OVER_CHARGE = 8.617333262e-5
"""k/q in volts per kelvin (CODATA 2018, exact constants)."""
ZERO_C = 273.15
REFERENCE_C = 25.0
BANDGAP_V = {"schottky": 0.69, "silicon": 1.11}
"""SPICE's usual EG for the two technologies (barrier height for a Schottky)."""
SATURATION_EXPONENT = {"schottky": 2.0, "silicon": 3.0}
"""SPICE's usual XTI for the two technologies."""
LEAST_SERIES_OHM = 1e-6
LEAKAGE_DOUBLES_K = 10.0
"""Used where the sheet prints leakage at one temperature only (common practice, no source)."""
LEAKAGE_POWER = 0.5
"""Used where the sheet prints leakage at one voltage only: a one-sided step junction's
generation current grows with its depletion width (Sze, Physics of Semiconductor Devices)."""


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
    leakage_power: float = LEAKAGE_POWER
    leakage_doubles_K: float = LEAKAGE_DOUBLES_K

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
        return scale * np.logaddexp(ratio, 0.0) + current * self.series_ohm

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
        knee = 0.1
        fade = -np.expm1(reverse / knee)
        height = (
            self.leakage_A
            * np.exp2((np.asarray(junction_C) - REFERENCE_C) / self.leakage_doubles_K)
            * ((1 - reverse) / (1 + self.leakage_V)) ** self.leakage_power
        )
        leak = height * fade
        leak_slope = np.where(
            volts < 0,
            height * np.exp(reverse / knee) / knee
            + leak * self.leakage_power / (1 - reverse),
            0.0,
        )
        return current - leak, slope + leak_slope


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


def diode_model(reference: str, part: Diode) -> DiodeModel:
    """Fit a diode's laws to its datasheet points.

    Raises InputError naming ``parts.<reference>`` when the points contradict each other.
    """
    model = junction_model(reference, part.forward, part.technology)
    if not part.leakage:
        note = f"{reference}: no leakage points are given, so its reverse leakage is taken as zero"
        return DiodeModel(model.typical, model.worst, (*model.notes, note))
    base, leak_notes = _leakage(reference, part.leakage)
    worst_ratio = max((p.max_A or p.typ_A) / p.typ_A for p in part.leakage)
    typical = _with_leakage(model.typical, base, 1.0)
    worst = _with_leakage(model.worst, base, worst_ratio)
    return DiodeModel(typical, worst, (*model.notes, *leak_notes))


def junction_model(
    reference: str, points: Sequence[ForwardPoint], technology: str, key: str = "forward"
) -> DiodeModel:
    """Fit the forward law to points at 25 C, and its temperature law to the others."""
    name = f"parts.{reference}.{key}"
    cold = sorted((p for p in points if p.junction_C == REFERENCE_C), key=lambda p: p.current_A)
    hot = [p for p in points if p.junction_C != REFERENCE_C]
    if not cold:
        raise InputError(f"{name} has no point at junction_C = 25: give at least one there")
    for low, high in zip(cold, cold[1:], strict=False):
        if high.typ_V <= low.typ_V:
            raise InputError(
                f"{name} contradicts itself: {high.typ_V:g} V at {high.current_A:g} A is not above "
                f"{low.typ_V:g} V at {low.current_A:g} A; a junction's drop rises with current"
            )
    notes: list[str] = []
    bandgap, exponent = BANDGAP_V[technology], SATURATION_EXPONENT[technology]
    ideality, series = _shape(reference, name, cold, notes)
    log_is = _anchor([(p.current_A, p.typ_V) for p in cold], ideality, series)
    typical = DiodeLaw(float(np.exp(log_is)), ideality, series, bandgap, exponent)
    if hot:
        bandgap = _bandgap(name, typical, hot)
        typical = DiodeLaw(float(np.exp(log_is)), ideality, series, bandgap, exponent)
    else:
        notes.append(
            f"{reference}: no hot forward point is given, so its drop is taken to fall with "
            f"temperature as a usual {technology} junction's does"
        )
    limits = [(p.current_A, p.max_V) for p in points if p.max_V and p.junction_C == REFERENCE_C]
    worst = typical
    if limits:
        most_series, most_is = _limit_law(cold, limits, ideality, series, log_is)
        worst = DiodeLaw(float(np.exp(most_is)), ideality, most_series, bandgap, exponent)
    else:
        notes.append(f"{reference}: no maximum drop is printed, so none of its spread is known")
    return DiodeModel(typical, worst, tuple(notes))


def _shape(
    reference: str, name: str, cold: Sequence[ForwardPoint], notes: list[str]
) -> tuple[float, float]:
    """Ideality and series resistance from three or more points; assumed in part from fewer."""
    vt = float(thermal_voltage(REFERENCE_C))
    amps = np.array([p.current_A for p in cold])
    volts = np.array([p.typ_V for p in cold])
    if len(cold) >= 3:
        design = np.column_stack([np.ones_like(amps), np.log(amps), amps])
        (_, slope, series), *_ = np.linalg.lstsq(design / volts[:, None], np.ones_like(volts))
        if 1.0 <= slope / vt <= 2.5 and series > 0:
            return float(slope / vt), float(series)
    ideality = 1.05
    if len(cold) >= 2:
        series = float(
            (volts[-1] - volts[0] - ideality * vt * np.log(amps[-1] / amps[0]))
            / (amps[-1] - amps[0])
        )
        if series < 0:
            slope = float((volts[-1] - volts[0]) / np.log(amps[-1] / amps[0]) / vt)
            if slope < 0.9:
                raise InputError(
                    f"{name} contradicts itself: from {amps[0]:g} A to {amps[-1]:g} A the drop "
                    f"rises by {volts[-1] - volts[0]:.3f} V, but no junction at 25 C can rise by "
                    f"less than {vt * np.log(amps[-1] / amps[0]):.3f} V"
                )
            ideality, series = max(slope, 1.0), LEAST_SERIES_OHM
        notes.append(
            f"{reference}: its forward points do not fix ideality and series resistance apart, so "
            f"an ideality of {ideality:.2f} is assumed; points at three currents or more would"
        )
        return ideality, max(series, LEAST_SERIES_OHM)
    series = 0.1 * float(volts[0] / amps[0])
    notes.append(
        f"{reference}: one forward point only, so a tenth of that drop is taken as series "
        "resistance"
    )
    return ideality, series


def _anchor(points: Sequence[tuple[float, float]], ideality: float, series: float) -> float:
    vt = float(thermal_voltage(REFERENCE_C))
    return float(np.mean([np.log(i) - (v - i * series) / (ideality * vt) for i, v in points]))


def _limit_law(
    cold: Sequence[ForwardPoint],
    limits: Sequence[tuple[float, float]],
    ideality: float,
    series: float,
    log_is: float,
) -> tuple[float, float]:
    """Series resistance and log saturation current of the part at the sheet's maxima.

    The excess of maximum over typical is split into a constant part (saturation current) and a
    part that grows with current (series resistance), neither of them negative.
    """
    vt = float(thermal_voltage(REFERENCE_C))
    typical = {p.current_A: p.typ_V for p in cold}
    amps = np.array([i for i, _ in limits])
    excess = np.array([v - typical[i] for i, v in limits])
    if len(limits) >= 2:
        design = np.column_stack([np.ones_like(amps), amps])
        (constant, rise), *_ = np.linalg.lstsq(design, excess)
        if constant >= 0 and rise >= 0:
            return series + float(rise), log_is - float(constant) / (ideality * vt)
    return series, log_is - float(excess.max()) / (ideality * vt)


def _bandgap(name: str, law: DiodeLaw, hot: Sequence[ForwardPoint]) -> float:
    estimates = []
    for point in hot:
        kelvin, reference = point.junction_C + ZERO_C, REFERENCE_C + ZERO_C
        n = float(law.ideality)
        drop = point.typ_V - point.current_A * float(law.series_ohm)
        log_is = np.log(point.current_A) - drop / (n * thermal_voltage(point.junction_C))
        change = log_is - np.log(law.saturation_A) - law.exponent / n * np.log(kelvin / reference)
        estimates.append(
            float(change * n * BOLTZMANN_OVER_CHARGE / (1 / reference - 1 / kelvin))
        )
    bandgap = float(np.mean(estimates))
    if not 0.2 <= bandgap <= 1.8:
        point = hot[0]
        raise InputError(
            f"{name} contradicts itself: {point.typ_V:g} V at {point.current_A:g} A and "
            f"{point.junction_C:g} C does not fit its points at 25 C; the drop of a junction falls "
            "by 1 to 3 mV per kelvin at a small current"
        )
    return bandgap


def _with_leakage(law: DiodeLaw, base: tuple[float, float, float, float], ratio: float) -> DiodeLaw:
    amps, volts, power, doubles = base
    return DiodeLaw(
        law.saturation_A, law.ideality, law.series_ohm, law.bandgap_V, law.exponent,
        amps * ratio, volts, power, doubles,
    )  # fmt: skip


def _leakage(
    reference: str, points: Sequence[LeakagePoint]
) -> tuple[tuple[float, float, float, float], list[str]]:
    """(amperes at 25 C, at volts, power of voltage, doubling kelvin) and notes."""
    notes = []
    power, doubles = LEAKAGE_POWER, LEAKAGE_DOUBLES_K
    first = points[0]
    volts = {p.reverse_V for p in points if p.junction_C == first.junction_C}
    temps = {p.junction_C for p in points if p.reverse_V == first.reverse_V}
    if len(volts) > 1:
        a, b = sorted((p for p in points if p.junction_C == first.junction_C),
                      key=lambda p: p.reverse_V)[:: len(volts) - 1][:2]  # fmt: skip
        power = float(np.log(b.typ_A / a.typ_A) / np.log((1 + b.reverse_V) / (1 + a.reverse_V)))
    else:
        notes.append(f"{reference}: leakage at one voltage only; taken to grow with its square root")
    if len(temps) > 1:
        same = sorted((p for p in points if p.reverse_V == first.reverse_V),
                      key=lambda p: p.junction_C)  # fmt: skip
        cold, hot = same[0], same[-1]
        if hot.typ_A <= cold.typ_A:
            raise InputError(
                f"parts.{reference}.leakage contradicts itself: {hot.typ_A:g} A at "
                f"{hot.junction_C:g} C is not above {cold.typ_A:g} A at {cold.junction_C:g} C"
            )
        doubles = float((hot.junction_C - cold.junction_C) / np.log2(hot.typ_A / cold.typ_A))
    else:
        notes.append(
            f"{reference}: leakage at one temperature only; taken to double every "
            f"{LEAKAGE_DOUBLES_K:g} K"
        )
    at_25 = first.typ_A / 2 ** ((first.junction_C - REFERENCE_C) / doubles)
    return (float(at_25), first.reverse_V, power, doubles), notes
