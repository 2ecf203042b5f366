"""From the points of a Zener or transient suppressor to its law: a diode with a knee."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from benchkit.errors import InputError
from benchkit.files.parts.junctions import ForwardPoint, Tvs, Zener
from benchkit.parts.diode import DiodeModel
from benchkit.parts.diode_points import junction_model, with_leakage
from benchkit.parts.knee import LEAST_SERIES_OHM, KneeLaw

FORWARD = (ForwardPoint(current_A=0.01, typ_V=0.75), ForwardPoint(current_A=0.1, typ_V=0.85))
"""A Zener's forward drop where none is printed (common practice, no source)."""
WIDEST_KNEE = 0.1
"""Of the voltage: a wider knee would conduct from no voltage on."""
KNEE_SHARE = 0.5
"""Of a Zener's dynamic resistance at its test current, where one point only is printed: the part
that falls with current (common practice, no source)."""
AVALANCHE_KNEE = 0.01
"""Of a suppressor's breakdown voltage (common practice, no source)."""
AVALANCHE_OHM_PER_V2 = 5.7e-4
"""Times breakdown squared: the dynamic resistance of a usual 600 W suppressor, which clamps at 1.35
times its breakdown at its peak current (common practice, no source)."""
TEMPCO_LIMIT_PER_K = 0.005
"""Of the voltage: more than any breakdown moves by; millivolts given as volts are a thousand times
as much."""


def usual_tempco(volts: float) -> float:
    """V/K of a breakdown at 25 C: tunnelling falls, avalanche rises (common practice, no source).

    -2 mV/K at 2.4 V and below, none from 5.1 to 5.6 V, 0.9e-3 of the voltage from 10 V on.
    """
    if volts >= 10.0:
        return 0.9e-3 * volts
    return float(np.interp(volts, [2.4, 5.1, 5.6, 10.0], [-2e-3, 0.0, 0.0, 9e-3]))


def zener_model(reference: str, part: Zener) -> DiodeModel:
    """Fit a Zener's laws to its datasheet points.

    Raises InputError naming ``parts.<reference>`` when the points contradict each other.
    """
    name, notes = f"parts.{reference}", list[str]()
    volts, amps = part.voltage.middle_V, part.voltage.current_A
    if part.dynamic_ohm * amps > 0.5 * volts:
        raise InputError(
            f"{name}.dynamic_ohm is {part.dynamic_ohm:g} ohm at {amps:g} A, which makes "
            f"{part.dynamic_ohm * amps:.2g} V of {volts:g} V: check the resistance and "
            f"{name}.voltage.current_A"
        )
    if volts * amps > part.power_max_W:
        raise InputError(
            f"{name}.power_max_W {part.power_max_W:g} is below the {volts * amps:.3g} W of its own "
            f"test point, {volts:g} V at {amps:g} A"
        )
    scale = _knee_scale(name, reference, part, notes)
    knee = KneeLaw(
        volts, amps, scale, max(part.dynamic_ohm - scale / amps, LEAST_SERIES_OHM),
        _tempco(reference, part.tempco_V_per_K, volts, notes),
    )  # fmt: skip
    if part.forward:
        model = junction_model(reference, part.forward, "silicon")
    else:
        model = replace(junction_model(reference, FORWARD, "silicon"), notes=())
        notes.append(
            f"{reference}: no forward point is given; {FORWARD[0].typ_V:g} V at "
            f"{FORWARD[0].current_A:g} A and {FORWARD[1].typ_V:g} V at {FORWARD[1].current_A:g} A "
            "are taken, as is usual"
        )
    if part.leakage:
        model = with_leakage(reference, part.leakage, model)
    return _with_knee(model, knee, part.voltage.min_V, part.voltage.max_V, notes)


def tvs_model(reference: str, part: Tvs) -> DiodeModel:
    """Fit a transient suppressor's laws to its datasheet points.

    Raises InputError naming ``parts.<reference>`` when the points contradict each other.
    """
    name, notes = f"parts.{reference}", list[str]()
    window = part.breakdown
    volts = window.middle_V
    if part.stand_off_V >= window.min_V:
        raise InputError(
            f"{name}.stand_off_V {part.stand_off_V:g} must be below {name}.breakdown.min_V "
            f"{window.min_V:g}: up to its stand-off voltage a suppressor does not conduct"
        )
    scale = AVALANCHE_KNEE * volts
    if _together(name, "clamping_V", part.clamping_V, "clamping_A", part.clamping_A):
        assert part.clamping_V is not None
        assert part.clamping_A is not None
        if part.clamping_A <= window.current_A:
            raise InputError(
                f"{name}.clamping_A {part.clamping_A:g} must be above {name}.breakdown.current_A "
                f"{window.current_A:g}: clamping is at the peak of a surge"
            )
        rise = part.clamping_V - window.max_V
        if rise <= 0:
            raise InputError(
                f"{name}.clamping_V {part.clamping_V:g} must be above {name}.breakdown.max_V "
                f"{window.max_V:g}: a suppressor's voltage rises with current"
            )
        # Both are maxima, so the rise between them is taken for every part's.
        decades = float(np.log(part.clamping_A / window.current_A))
        scale = min(scale, 0.5 * rise / decades)
        series = (rise - scale * decades) / (part.clamping_A - window.current_A)
    else:
        series = AVALANCHE_OHM_PER_V2 * volts**2
        notes.append(
            f"{reference}: no clamping point is given; a dynamic resistance of {series:.2g} ohm is "
            "taken, as of usual 600 W parts"
        )
    model = junction_model(reference, part.forward, "silicon")
    if part.leakage:
        model = with_leakage(reference, part.leakage, model)
    else:
        notes.append(
            f"{reference}: no leakage points are given, so only its saturation current leaks"
        )
    tempco = _tempco(reference, part.tempco_V_per_K, volts, notes)
    knee = KneeLaw(volts, window.current_A, scale, series, tempco)
    return _with_knee(model, knee, window.min_V, window.max_V, notes)


def _knee_scale(name: str, reference: str, part: Zener, notes: list[str]) -> float:
    """The knee's width in volts, from dynamic resistance at two currents or assumed from one."""
    amps = part.voltage.current_A
    most = min(WIDEST_KNEE * part.voltage.middle_V, part.dynamic_ohm * amps)
    if not _together(name, "knee_ohm", part.knee_ohm, "knee_current_A", part.knee_current_A):
        notes.append(
            f"{reference}: dynamic resistance is given at one current only; half of it is taken to "
            "fall with current"
        )
        return min(KNEE_SHARE * part.dynamic_ohm * amps, most)
    assert part.knee_ohm is not None
    assert part.knee_current_A is not None
    if part.knee_current_A >= amps:
        raise InputError(
            f"{name}.knee_current_A {part.knee_current_A:g} must be below "
            f"{name}.voltage.current_A {amps:g}: the knee is where a Zener just conducts"
        )
    if part.knee_ohm <= part.dynamic_ohm:
        raise InputError(
            f"{name}.knee_ohm {part.knee_ohm:g} must be above {name}.dynamic_ohm "
            f"{part.dynamic_ohm:g}: dynamic resistance falls as the current rises"
        )
    scale = (part.knee_ohm - part.dynamic_ohm) / (1 / part.knee_current_A - 1 / amps)
    if scale > most:
        notes.append(
            f"{reference}: no exponential knee has both its dynamic resistances; the one at "
            f"{amps:g} A is kept, and the one at {part.knee_current_A:g} A comes out lower"
        )
    return min(scale, most)


def _together(name: str, one: str, first: float | None, other: str, second: float | None) -> bool:
    """Whether both of two keys are given; InputError when only one is."""
    if (first is None) != (second is None):
        there, missing = (one, other) if second is None else (other, one)
        raise InputError(f"{name}.{there} needs {name}.{missing} beside it")
    return first is not None


def _tempco(reference: str, given: float | None, volts: float, notes: list[str]) -> float:
    if given is None:
        tempco = usual_tempco(volts)
        notes.append(
            f"{reference}: no temperature coefficient is given; {1e3 * tempco:.2g} mV/K is taken, "
            f"as is usual at {volts:g} V"
        )
        return tempco
    most = TEMPCO_LIMIT_PER_K * volts
    if abs(given) > most:
        raise InputError(
            f"parts.{reference}.tempco_V_per_K is {given:g}, it must be within {most:g} either way "
            f"at {volts:g} V: it is in volts, not millivolts, per kelvin"
        )
    return given


def _with_knee(
    model: DiodeModel, knee: KneeLaw, min_V: float, max_V: float, notes: list[str]
) -> DiodeModel:
    return DiodeModel(
        replace(model.typical, knee=knee), replace(model.worst, knee=replace(knee, volts_V=max_V)),
        (*model.notes, *notes), min_V, max_V,
    )  # fmt: skip
