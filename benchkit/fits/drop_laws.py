"""Forward drop against current: the laws a stage's drop is fitted to.

``fit_channel`` for a MOSFET that is on (a resistance), ``fit_diode`` for a diode or a body diode.
Both treat the gain and offset of the meters as common to the whole sweep. What the data mean is
said in ``benchkit.fits.drop``.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from benchkit.fits.least_squares import Fit, fit
from benchkit.metrology.accuracy import Accuracy
from benchkit.metrology.budget import Distribution

Array = NDArray[np.float64]

# CODATA 2018, exact: Boltzmann constant over elementary charge [V/K].
K_OVER_Q = 1.380649e-23 / 1.602176634e-19
ZERO_C = 273.15
REFERENCE_C = 25.0


def channel_law(x: Array, p: Array) -> Array:
    """V = I R25 + V0, x = current already multiplied by 1 + alpha (T - 25)."""
    return np.asarray(p[0] * x + p[1])


def diode_law(x: Array, p: Array) -> Array:
    """V = n Vt ln(1 + I/Is) + I Rs.

    Args:
        x: (3, ...) current [A], thermal voltage [V], and what temperature adds to n ln Is.
        p: ln(Is / 1 A) at the reference temperature, ideality n, series resistance Rs [ohm].
    """
    current, thermal, shift = x
    ln_saturation = p[0] + shift / p[1]
    # ln(1 + I/Is) without overflow, Is may be 1e-30 A.
    with np.errstate(divide="ignore"):
        log_ratio = np.log(np.maximum(current, 0.0)) - ln_saturation
    return np.asarray(p[1] * thermal * np.logaddexp(0.0, log_ratio) + current * p[2])


def fit_channel(
    current_A: ArrayLike,
    drop_V: ArrayLike,
    temperature_C: ArrayLike,
    *,
    alpha_per_K: float,
    u_noise_V: ArrayLike,
    scale_noise: bool = False,
    u_alpha_per_K: float = 0.0,
    u_temperature_K: float = 0.0,
    drop_accuracy: Accuracy | None = None,
    current_accuracy: Accuracy | None = None,
    common: Mapping[str, ArrayLike] | None = None,
    distributions: Mapping[str, Distribution] | None = None,
    label: str = "drop sweep",
) -> Fit:
    """Fit V = I R25 (1 + alpha (T - 25 degC)) + V0; parameters ``R25_ohm`` and ``V0_V``.

    Args:
        current_A, drop_V, temperature_C: (n,) each, n >= 2; junction temperature, or case.
        alpha_per_K: relative rise of the resistance per kelvin, at 25 degC.
        u_noise_V: standard deviation of the noise of a drop reading [V].
        scale_noise: estimate the noise from the residuals instead (n >= 3).
        u_alpha_per_K: standard uncertainty of alpha.
        u_temperature_K: standard uncertainty of temperature, common to all points.
        drop_accuracy, current_accuracy: declared limits of error of the ranges used; they enter as
            'drop meter gain', 'drop meter offset', 'current meter gain', 'current meter offset'.
        common, distributions: further errors, (n,) what one standard uncertainty adds to V.
        label: of the sweep.

    V0 is no part of the law: an intercept is a thermoelectric voltage, a meter zero or a contact.
    """
    current, drop, temperature = _sweep(current_A, drop_V, temperature_C, label)
    heated = current * (1.0 + alpha_per_K * (temperature - REFERENCE_C))
    size = float(np.max(np.abs(heated))) or 1.0
    resistance = float(np.max(np.abs(drop))) / size or 1e-6
    found = fit(
        channel_law,
        heated,
        drop,
        [resistance, 0.1 * resistance * size],
        u_noise_V,
        common,
        distributions,
        scale_noise=scale_noise,
        names=("R25_ohm", "V0_V"),
        label=label,
    )
    r25 = found["R25_ohm"]
    slope = r25 * heated / np.where(current == 0.0, 1.0, current)
    slope[current == 0.0] = r25
    return _with_errors(
        found,
        current,
        drop,
        slope,
        drop_accuracy,
        current_accuracy,
        {
            # Read too warm by u: the law is made too large there, as if V were too small.
            "temperature": -r25 * current * alpha_per_K * u_temperature_K,
            "temperature coefficient": -r25 * current * (temperature - REFERENCE_C) * u_alpha_per_K,
        },
    )


def fit_diode(
    current_A: ArrayLike,
    drop_V: ArrayLike,
    temperature_C: ArrayLike,
    *,
    u_noise_V: ArrayLike,
    scale_noise: bool = False,
    gap_eV: float | None = None,
    xti: float = 3.0,
    u_temperature_K: float = 0.0,
    drop_accuracy: Accuracy | None = None,
    current_accuracy: Accuracy | None = None,
    common: Mapping[str, ArrayLike] | None = None,
    distributions: Mapping[str, Distribution] | None = None,
    label: str = "drop sweep",
) -> Fit:
    """Fit V = n Vt ln(1 + I/Is) + I Rs; parameters ``ln_Is``, ``n`` and ``Rs_ohm``.

    Args:
        current_A, drop_V, temperature_C: (n,) each, n >= 4, currents above zero, at three or more
            different currents; junction temperature.
        u_noise_V, scale_noise, drop_accuracy, current_accuracy, common, distributions, label: as
            for ``fit_channel``.
        gap_eV: bandgap (1.11 for silicon, about 0.69 for a Schottky; SPICE's defaults). With it the
            saturation current follows temperature by
            Is (T/Tr)^(xti/n) exp(gap/(n Vt(Tr)) - gap/(n Vt)), Tr = 25 degC. Without it ``ln_Is``
            is that of the temperature of the sweep, which then must be nearly constant: heating
            that grows with current passes for a smaller Rs, and the residuals do not show it.
        xti: exponent of that law, 3 for a junction and 2 for a Schottky.
        u_temperature_K: standard uncertainty of temperature, common to all points.

    The three parameters are strongly correlated over a narrow range of currents; the curve
    (``budget_at``) is then known much better than any one of them.
    """
    current, drop, temperature = _sweep(current_A, drop_V, temperature_C, label)
    if current.size < 4 or np.unique(current).size < 3 or np.any(current <= 0.0):
        raise ValueError(
            f"{label}: a diode law needs 4 points or more at 3 or more currents, all above zero"
        )
    x = diode_conditions(current, temperature, gap_eV, xti)
    low, high = np.array([-90.0, 0.5, 0.0]), np.array([0.0, 4.0, 10.0])
    # Above the knee the law is linear in n, in n ln Is and in Rs: a safe start.
    thermal = x[1]
    rows = np.stack([thermal * np.log(current), -thermal, current], axis=1)
    known = drop + thermal * x[2]
    (n0, n_ln0, rs0), *_ = np.linalg.lstsq(rows, known, rcond=None)
    n0 = float(np.clip(n0, 0.8, 3.0))
    start = np.array([np.clip(n_ln0 / n0, -80.0, -3.0), n0, np.clip(rs0, 1e-4, 5.0)])
    found = fit(
        diode_law,
        x,
        drop,
        start,
        u_noise_V,
        common,
        distributions,
        bounds=(low, high),
        scale_noise=scale_noise,
        names=("ln_Is", "n", "Rs_ohm"),
        label=label,
    )
    n, rs = found["n"], found["Rs_ohm"]
    slope = n * thermal / current + rs
    step_K = 0.01
    warmer = diode_conditions(current, temperature + step_K, gap_eV, xti)
    per_K = (found.predict(warmer) - found.predict(x)) / step_K
    return _with_errors(
        found,
        current,
        drop,
        slope,
        drop_accuracy,
        current_accuracy,
        {"temperature": -per_K * u_temperature_K},
    )


def diode_conditions(
    current_A: ArrayLike, temperature_C: ArrayLike, gap_eV: float | None = None, xti: float = 3.0
) -> Array:
    """The ``x`` of ``diode_law``, (3, ...), for predicting a fitted diode at other conditions."""
    current, temperature = np.broadcast_arrays(
        np.asarray(current_A, dtype=np.float64), np.asarray(temperature_C, dtype=np.float64)
    )
    kelvin = temperature + ZERO_C
    thermal = K_OVER_Q * kelvin
    if gap_eV is None:
        shift = np.zeros_like(thermal)
    else:
        reference = REFERENCE_C + ZERO_C
        shift = xti * np.log(kelvin / reference) + gap_eV * (
            1.0 / (K_OVER_Q * reference) - 1.0 / thermal
        )
    return np.stack([current, thermal, shift])


def channel_conditions(current_A: ArrayLike, temperature_C: ArrayLike, alpha_per_K: float) -> Array:
    """The ``x`` of ``channel_law``, for predicting a fitted channel at other conditions."""
    temperature = np.asarray(temperature_C, dtype=np.float64)
    return np.asarray(current_A, dtype=np.float64) * (
        1.0 + alpha_per_K * (temperature - REFERENCE_C)
    )


def _sweep(
    current_A: ArrayLike, drop_V: ArrayLike, temperature_C: ArrayLike, label: str
) -> tuple[Array, Array, Array]:
    current = np.asarray(current_A, dtype=np.float64)
    drop = np.asarray(drop_V, dtype=np.float64)
    temperature = np.broadcast_to(np.asarray(temperature_C, dtype=np.float64), current.shape)
    if current.ndim != 1 or current.shape != drop.shape:
        raise ValueError(
            f"{label}: {current.size} currents and {drop.size} drops do not belong together"
        )
    return current, drop, temperature


def _with_errors(
    found: Fit,
    current: Array,
    drop: Array,
    slope: Array,
    drop_accuracy: Accuracy | None,
    current_accuracy: Accuracy | None,
    others: Mapping[str, Array],
) -> Fit:
    """Adds what the meters and the thermometer can be wrong by.

    A meter that reads the current too high by d leaves the drop as it is, which to the fit is a
    drop too small by slope times d: hence the sign.
    """
    common: dict[str, Array] = {}
    shapes: dict[str, Distribution] = {}
    third = 1.0 / math.sqrt(3.0)
    for name, accuracy, reading, sensitivity in (
        ("drop meter", drop_accuracy, drop, np.ones_like(drop)),
        ("current meter", current_accuracy, current, -slope),
    ):
        if accuracy is None:
            continue
        common[f"{name} gain"] = sensitivity * reading * accuracy.gain_limit() * third
        common[f"{name} offset"] = sensitivity * accuracy.offset_limit() * third
        shapes[f"{name} gain"] = shapes[f"{name} offset"] = "rectangular"
    for name, vector in others.items():
        if np.any(vector != 0.0):
            common[name], shapes[name] = vector, "normal"
    return found.with_common(common, shapes)
