"""From a diode's datasheet points to its law, its spread, and what had to be assumed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np

from benchkit.errors import InputError
from benchkit.files.parts.junctions import Diode, ForwardPoint, LeakagePoint
from benchkit.parts.diode import (
    BOLTZMANN_OVER_CHARGE,
    LEAST_SERIES_OHM,
    REFERENCE_C,
    ZERO_C,
    DiodeLaw,
    DiodeModel,
    thermal_voltage,
)

BANDGAP_V = {"schottky": 0.69, "silicon": 1.11}
"""SPICE's usual EG for the two technologies (barrier height for a Schottky)."""
SATURATION_EXPONENT = {"schottky": 2.0, "silicon": 3.0}
"""SPICE's usual XTI for the two technologies."""
REMARKABLE = 0.05
"""A fit that is off by more than this at a printed point is remarked upon."""
LEAKAGE_DOUBLES_K = 10.0
"""Used where the sheet prints leakage at one temperature only (common practice, no source)."""
LEAKAGE_POWER = 0.5
"""Used where the sheet prints leakage at one voltage only: a one-sided step junction's
generation current grows with its depletion width (Sze, Physics of Semiconductor Devices)."""


def diode_model(reference: str, part: Diode) -> DiodeModel:
    """Fit a diode's laws to its datasheet points.

    Raises InputError naming ``parts.<reference>`` when the points contradict each other.
    """
    model = junction_model(reference, part.forward, part.technology)
    if not part.leakage:
        note = f"{reference}: no leakage points are given, so only its saturation current leaks"
        return DiodeModel(model.typical, model.worst, (*model.notes, note))
    return with_leakage(reference, part.leakage, model)


def with_leakage(reference: str, points: Sequence[LeakagePoint], model: DiodeModel) -> DiodeModel:
    """The model with its leakage fitted to points (at least one), and its maxima."""
    leaking, notes = _leakage(reference, points, model.typical)
    most = max((p.max_A or p.typ_A) / p.typ_A for p in points)
    worst = replace(
        model.worst,
        leakage_A=float(leaking.leakage_A) * most, leakage_V=leaking.leakage_V,
        leakage_power=leaking.leakage_power, leakage_doubles_K=leaking.leakage_doubles_K,
    )  # fmt: skip
    return replace(model, typical=leaking, worst=worst, notes=(*model.notes, *notes))


def junction_model(
    reference: str, points: Sequence[ForwardPoint], technology: str, key: str = "forward"
) -> DiodeModel:
    """Fit the forward law to points at 25 C, and its temperature law to the others."""
    name = f"parts.{reference}.{key}"
    cold = sorted((p for p in points if p.junction_C == REFERENCE_C), key=lambda p: p.current_A)
    hot = [p for p in points if p.junction_C != REFERENCE_C]
    if not cold:
        raise InputError(f"{name} has no point at junction_C = 25: give at least one there")
    for low, high in pairwise(cold):
        if high.current_A == low.current_A:
            raise InputError(
                f"{name} has two points at {low.current_A:g} A and 25 C: give one, with typ_V and "
                "max_V in it"
            )
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
        typical = replace(typical, bandgap_V=bandgap)
    else:
        notes.append(
            f"{reference}: no hot forward point is given, so its drop is taken to fall with "
            f"temperature as a usual {technology} junction's does"
        )
    limits = [(p.current_A, p.max_V) for p in points if p.max_V and p.junction_C == REFERENCE_C]
    off = max(
        abs(float(typical.forward_V(p.current_A, p.junction_C)) / p.typ_V - 1) for p in points
    )
    if off > REMARKABLE:
        notes.append(
            f"{reference}: no junction law passes through all its forward points; the nearest one "
            f"is off by {100 * off:.0f} % at one of them"
        )
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
        estimates.append(float(change * n * BOLTZMANN_OVER_CHARGE / (1 / reference - 1 / kelvin)))
    bandgap = float(np.mean(estimates))
    if not 0.2 <= bandgap <= 1.8:
        point = hot[0]
        raise InputError(
            f"{name} contradicts itself: {point.typ_V:g} V at {point.current_A:g} A and "
            f"{point.junction_C:g} C does not fit its points at 25 C; the drop of a junction falls "
            "by 1 to 3 mV per kelvin at a small current"
        )
    return bandgap


def _leakage(
    reference: str, points: Sequence[LeakagePoint], law: DiodeLaw
) -> tuple[DiodeLaw, list[str]]:
    """The law with its leakage, and notes on what the points left open."""
    name = f"parts.{reference}.leakage"
    volts = np.log1p([p.reverse_V for p in points])
    temps = np.array([p.junction_C for p in points]) - REFERENCE_C
    left = np.log([p.typ_A for p in points])
    notes, power, doubles = [], LEAKAGE_POWER, LEAKAGE_DOUBLES_K
    columns = [np.ones_like(volts)]
    by_temp = np.ptp(temps) > 0
    # Two points that differ in both say only how the two together change: temperature is the
    # stronger one.
    by_volt = np.ptp(volts) > 0 and np.linalg.matrix_rank(
        np.column_stack([columns[0], temps, volts])
    ) == 2 + int(by_temp)  # fmt: skip
    if by_temp:
        columns.append(temps)
    else:
        left = left - temps * np.log(2) / LEAKAGE_DOUBLES_K
        notes.append(
            f"{reference}: leakage at one temperature only; taken to double every "
            f"{LEAKAGE_DOUBLES_K:g} K"
        )
    if by_volt:
        columns.append(volts)
    else:
        left = left - LEAKAGE_POWER * volts
        notes.append(
            f"{reference}: leakage does not say how it grows with voltage; taken to grow with the "
            "square root"
        )
    fitted, *_ = np.linalg.lstsq(np.column_stack(columns), left)
    if by_temp:
        if fitted[1] <= 0:
            raise InputError(
                f"{name} contradicts itself: it falls or stays as the junction gets hotter, from "
                f"{min(points, key=lambda p: p.junction_C).typ_A:g} A to "
                f"{max(points, key=lambda p: p.junction_C).typ_A:g} A; leakage doubles every 8 to "
                "15 K"
            )
        doubles = float(np.log(2) / fitted[1])
    if by_volt:
        if fitted[-1] < 0:
            raise InputError(
                f"{name} contradicts itself: it falls as the reverse voltage rises; check that "
                "reverse_V and typ_A belong together"
            )
        power = float(fitted[-1])
    at_V = max(p.reverse_V for p in points)
    at_25 = float(np.exp(fitted[0] + power * np.log1p(at_V)))
    law = replace(
        law, leakage_A=at_25, leakage_V=at_V, leakage_power=power, leakage_doubles_K=doubles
    )
    return law, notes
