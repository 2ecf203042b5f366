"""The law fitted to a sweep, as the drop curve shows it beside the readings."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.findings import junction_of, temperature_coefficient
from benchkit.evaluation.sources import accuracy_of
from benchkit.evaluation.sweep import Sweep
from benchkit.evaluation.verdict import rounded
from benchkit.fits.drop_laws import channel_conditions, diode_conditions, fit_channel, fit_diode
from benchkit.fits.least_squares import Fit
from benchkit.metrology import Accuracy, Distribution
from benchkit.parts.diode import DiodeModel
from benchkit.records.record import Record
from benchkit.stage import Stage

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class FittedLaw:
    """A law that was fitted; ``current_A`` and ``curve_V`` draw it, (n,), rising."""

    current_A: Floats
    curve_V: Floats
    residual_V: Floats
    """(visits,) measured less fitted."""
    sentences: list[str]


def fitted_law(record: Record, stage: Stage, sweep: Sweep) -> FittedLaw | str:
    """Fit the stage's law to every visit; a string says in words why none could be fitted."""
    if stage.conducts == "lead" or "fuse" in stage.names:
        return "The drop is that of leads, and of a fuse: no law is fitted to it."
    least = 3 if stage.conducts == "channel" else 4
    if len(sweep.targets) < least:
        return (
            f"No law could be fitted to the sweep: it has {len(sweep.targets)} currents, and the "
            f"law of a {stage.conducts} needs {least}."
        )
    amps, volts = sweep.current_A, sweep.drop_V
    drop, current = _accuracies(record, sweep)
    lead = "fixture inside the Kelvin taps"
    common = {lead: record.bench.points["drop"].lead_tolerance_ohm * amps / math.sqrt(3)}
    shapes: dict[str, Distribution] = {lead: "rectangular"}
    junction = junction_of(stage, sweep)
    noise = max(sweep.drop_zero.noise, 1e-7)
    order = np.argsort(amps)
    grid = np.linspace(0, 1, 81)
    try:
        if stage.conducts == "channel":
            alpha = temperature_coefficient(stage)
            found = fit_channel(
                amps, volts, junction, alpha_per_K=alpha, u_noise_V=noise, scale_noise=True,
                drop_accuracy=drop, current_accuracy=current, common=common,
                distributions=shapes,
            )  # fmt: skip
            line = amps.max() * grid
            at = channel_conditions(line, np.interp(line, amps[order], junction[order]), alpha)
            sentences = _channel_words(found)
        else:
            law = stage.models[stage.main]
            assert isinstance(law, DiodeModel)
            gap, exponent = law.typical.bandgap_V, law.typical.exponent
            found = fit_diode(
                amps, volts, junction, u_noise_V=noise, scale_noise=True, gap_eV=gap,
                xti=exponent, drop_accuracy=drop, current_accuracy=current, common=common,
                distributions=shapes,
            )  # fmt: skip
            line = np.geomspace(amps.min(), amps.max(), grid.size)
            at = diode_conditions(
                line, np.interp(line, amps[order], junction[order]), gap, exponent
            )
            sentences = _junction_words(found)
    except (ValueError, np.linalg.LinAlgError) as error:
        return f"No law could be fitted to the sweep: {error}."
    scatter = found.residual_sd
    sentences.append(
        f"The readings scatter around it by {1e3 * scatter:.2g} mV (standard deviation)."
    )
    if found.why:
        sentences.append(
            f"{'A remark on the fit' if found.describes else 'The law does not describe the data'}:"
            f" {found.why}."
        )
    if found.at_bound:
        sentences.append(
            f"{', '.join(found.at_bound)} ended on a bound of what the fit allows: "
            "do not use the fitted parameters."
        )
    return FittedLaw(line, found.predict(at), found.residuals, sentences)


def _accuracies(record: Record, sweep: Sweep) -> tuple[Accuracy, Accuracy]:
    """Declared accuracy of the drop's range, and of the current's in amperes, shunt included."""
    point = record.bench.points["exposed_current"]
    current = accuracy_of(record.bench, "exposed_current", sweep.current_range_V)
    return accuracy_of(record.bench, "drop", sweep.drop_range_V), Accuracy(
        current.range / (point.shunt_ohm or 1.0),
        current.reading_percent + point.shunt_tolerance_percent, current.range_percent,
    )  # fmt: skip


def _value(found: Fit, name: str, scale: float) -> str:
    expanded = found.budget(name).expanded()
    value, spread = rounded(scale * found[name], scale * expanded.U)
    return f"{value.replace('-', '−')} ± {spread}"


def _channel_words(found: Fit) -> list[str]:
    return [
        f"Fitted law: a resistance of {_value(found, 'R25_ohm', 1e3)} mΩ at 25 °C that grows "
        f"with temperature as the datasheet says, and {_value(found, 'V0_V', 1e3)} mV that would "
        "remain at no current (± U, 95 %)."
    ]


def _junction_words(found: Fit) -> list[str]:
    return [
        f"Fitted law: a junction of ideality {_value(found, 'n', 1.0)} with "
        f"{_value(found, 'Rs_ohm', 1e3)} mΩ in series and ln(Is / 1 A) = "
        f"{_value(found, 'ln_Is', 1.0)} at 25 °C (± U, 95 %). The three lean on each other; the "
        "curve is known better than any of them."
    ]
