"""Forward drop against current: the fits, and what a sweep says about the part in plain sentences.

The thresholds are common practice, no source: a junction begins to carry current at 0.15 V
(Schottky) to 0.6 V (silicon), and its drop grows far slower than the current; a channel's drop is
proportional to the current.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from benchkit.fits.drop_laws import (
    channel_conditions,
    diode_conditions,
    fit_channel,
    fit_diode,
)
from benchkit.metrology.accuracy import Accuracy

__all__ = [
    "Finding",
    "Topology",
    "channel_conditions",
    "diagnose",
    "diode_conditions",
    "fit_channel",
    "fit_diode",
]

Array = NDArray[np.float64]
Topology = Literal["channel", "junction"]

_KNEE_V = 0.15  # smallest drop that can be a junction's at the low end of a sweep
_NOTHING_V = 0.05  # a junction that carries current never drops less
_SIGMAS = 4.0  # beyond noise: one false alarm in about 16000 sweeps


@dataclass(frozen=True)
class Finding:
    """One thing the data mean.

    ``kind`` is one of ``gate-not-driven``, ``lead-or-contact``, ``heat``, ``drift``, ``shorted``,
    ``open``, ``too-few``; ``text`` is a sentence for the user.
    """

    kind: str
    text: str


def diagnose(
    topology: Topology,
    current_A: ArrayLike,
    drop_V: ArrayLike,
    temperature_C: ArrayLike,
    *,
    u_noise_V: float,
    rising: ArrayLike | None = None,
    alpha_per_K: float = 0.0,
    drop_accuracy: Accuracy | None = None,
    current_accuracy: Accuracy | None = None,
    compliance_V: float | None = None,
) -> list[Finding]:
    """Say what a sweep means; an empty list when it looks as it should.

    Args:
        topology: ``channel`` where a MOSFET is meant to be on, ``junction`` for a diode.
        current_A, drop_V, temperature_C: (n,) the sweep in the order it was taken.
        u_noise_V: standard deviation of the noise of one drop reading.
        rising: (n,) true for the points on the way up; without it heat cannot be told from it.
        alpha_per_K: of the channel, as for ``fit_channel``.
        drop_accuracy, current_accuracy: limits of error of the ranges used.
        compliance_V: the supply's voltage; a drop near it means that nothing conducts.
    """
    if topology not in ("channel", "junction"):
        raise ValueError(f"topology {topology!r} must be 'channel' or 'junction'")
    current = np.asarray(current_A, dtype=np.float64)
    drop = np.asarray(drop_V, dtype=np.float64)
    temperature = np.broadcast_to(np.asarray(temperature_C, dtype=np.float64), current.shape)
    good = np.isfinite(current) & np.isfinite(drop) & np.isfinite(temperature) & (current > 0.0)
    if np.unique(current[good]).size < 3:
        return [
            Finding("too-few", "Fewer than three different currents: the sweep shows no shape.")
        ]
    findings = _shape(topology, current[good], drop[good], u_noise_V, compliance_V)
    if topology == "channel" and not findings:
        findings += _intercept(
            current[good],
            drop[good],
            temperature[good],
            alpha_per_K,
            u_noise_V,
            drop_accuracy,
            current_accuracy,
        )
    if rising is not None:
        up = np.asarray(rising, dtype=bool)[good]
        findings += _hysteresis(topology, current[good], drop[good], up, u_noise_V)
    return findings


def _shape(
    topology: Topology, current: Array, drop: Array, noise: float, compliance: float | None
) -> list[Finding]:
    lowest, highest = float(drop[np.argmin(current)]), float(np.max(drop))
    if compliance is not None and float(np.min(drop)) > 0.9 * compliance:
        return [
            Finding(
                "open",
                f"The whole supply voltage ({highest:.2f} V) stays across the part: it does not "
                "conduct. Suspect an open part, a blown fuse or a lead that is off.",
            )
        ]
    growth = _growth(current, drop, noise)
    if topology == "channel":
        if lowest > _KNEE_V and growth < 0.5:
            return [
                Finding(
                    "gate-not-driven",
                    f"The channel drops like a diode ({lowest:.2f} V already at "
                    f"{float(np.min(current)):.3g} A): the gate is not driven and the body diode "
                    "carries the current. Check the gate lead, its resistor, the supply voltage.",
                )
            ]
        return []
    if highest < _NOTHING_V:
        return [
            Finding(
                "shorted",
                f"The junction drops next to nothing ({1e3 * highest:.1f} mV at most): the part is "
                "shorted or bridged.",
            )
        ]
    if growth > 0.7 and lowest < _KNEE_V:
        return [
            Finding(
                "shorted",
                "The junction drops like a resistor of about "
                f"{highest / float(np.max(current)):.3g} ohm, without a knee: the part is shorted, "
                "or something resistive lies across it.",
            )
        ]
    return []


def _growth(current: Array, drop: Array, noise: float) -> float:
    """d ln V / d ln I: 1 for a resistor, about 0.1 for a junction; NaN when nothing is seen."""
    seen = drop > 5.0 * noise
    if np.unique(current[seen]).size < 2:
        return math.nan
    x, y = np.log(current[seen]), np.log(drop[seen])
    x = x - x.mean()
    return float(x @ (y - y.mean()) / (x @ x))


def _intercept(
    current: Array,
    drop: Array,
    temperature: Array,
    alpha: float,
    noise: float,
    drop_accuracy: Accuracy | None,
    current_accuracy: Accuracy | None,
) -> list[Finding]:
    found = fit_channel(
        current,
        drop,
        temperature,
        alpha_per_K=alpha,
        u_noise_V=noise,
        drop_accuracy=drop_accuracy,
        current_accuracy=current_accuracy,
    )
    # The coverage of a finding is kept at that of the other ones, not at 95 %.
    limit = found.budget("V0_V").expanded(0.9999).U
    v0 = found["V0_V"]
    if abs(v0) <= limit:
        return []
    return [
        Finding(
            "lead-or-contact",
            f"At no current {1e3 * v0:+.2f} mV would remain, more than its uncertainty of "
            f"{1e3 * limit:.2f} mV: a resistance has no such intercept. Suspect a sense lead, a "
            "contact, a thermoelectric voltage or the meter's zero.",
        )
    ]


def _hysteresis(
    topology: Topology, current: Array, drop: Array, up: NDArray[np.bool_], noise: float
) -> list[Finding]:
    """Compares the way down with the way up, joined by straight pieces, at the same currents."""
    if topology == "junction":
        current = np.log(current)  # a junction's drop is straight against the logarithm
    order = np.argsort(current[up], kind="stable")
    x, y = current[up][order], drop[up][order]
    down = ~up
    if x.size < 2 or not np.any(down):
        return []
    down &= (current >= x[0]) & (current <= x[-1])
    if not np.any(down):
        return []
    difference = drop[down] - np.interp(current[down], x, y)
    # A point between two others is compared with their mean, which makes this bound safe.
    limit = _SIGMAS * noise * math.sqrt(2.0 / difference.size)
    mean = float(difference.mean())
    if abs(mean) <= limit:
        return []
    warms = mean > 0.0 if topology == "channel" else mean < 0.0
    change = f"The drop comes back {abs(1e3 * mean):.2f} mV {'higher' if mean > 0 else 'lower'}"
    if warms:
        return [
            Finding(
                "heat",
                f"{change} than it went up: the part heated during the sweep. Use shorter pulses, "
                "longer waits, or correct for temperature.",
            )
        ]
    return [
        Finding(
            "drift",
            f"{change} than it went up, which is not what heat does to a {topology}: suspect a "
            "contact that moves, or a meter that drifts.",
        )
    ]
