"""What the datasheets promise of a stage against its supply voltage, worked out once a stage."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.verdict import Promise
from benchkit.files import StageFile
from benchkit.parts.mosfet import MosfetLaws
from benchkit.prediction.forward import forward
from benchkit.prediction.predict import BAND_PERCENT, SCENARIO_SAMPLES, SEED
from benchkit.stage import Sample, Stage, build_stage

Floats = NDArray[np.float64]

FINER = 4
"""The band is worked out at this many steps between two voltages of the sweep."""
ROUND_K = 2.0
"""Boards of a lot whose cases are this near each other share one band: a threshold moves by 2 mV/K,
a resistance by 0.4 %/K (common practice, no source)."""
LOWER = 0.9
"""The band begins at this share of the lowest voltage listed."""
SAME = 1e-6


@dataclass(frozen=True)
class Onset:
    """Of a supply voltage from which something holds, of 95 % of boards and of all that were drawn
    with every part at its limit; promise is None where some of these never get there."""

    promise: Promise | None
    least_V: float
    most_V: float


@dataclass(frozen=True)
class SupplyBand:
    """volts, typical_V, low_V, high_V: shape (points,), drops against supply voltage, nan where the
    current is not carried. gate_least_V, gate_most_V: gate against source over all boards drawn,
    with its sign. on_level_V: see ``supply_sweep``; None, with both onsets, for a part
    without a gate."""

    volts: Floats
    typical_V: Floats
    low_V: Floats
    high_V: Floats
    gate_least_V: Floats
    gate_most_V: Floats
    on_level_V: float | None
    on_from: Onset | None
    useful_from: Onset | None

    def drop_at(self, volts: float) -> Promise | None:
        """At a voltage within the sweep."""
        found = [float(np.interp(volts, self.volts, of, np.nan))
                 for of in (self.typical_V, self.low_V, self.high_V)]  # fmt: skip
        return None if np.isnan(found).any() else Promise(*found)


def supply_band(stage: Stage, junction_C: float) -> SupplyBand:
    """For the supply sweep that the stage's file asks for, at a junction temperature."""
    rounded = ROUND_K * round(junction_C / ROUND_K)
    return _band(stage.file.model_dump_json(), rounded)


def on_level(stage: Stage) -> float | None:
    """See ``supply_sweep``; None for a part without a gate."""
    sweep, working, law = (
        stage.file.supply_sweep,
        stage.file.stage,
        stage.typical().laws[stage.main],
    )
    if sweep is None or not isinstance(law, MosfetLaws):
        return None
    amps = sweep.current_A or working.current_nominal_A
    ambient, top = working.ambient_nominal_C, sweep.voltages_V[-1]
    fully = float(forward(stage, stage.typical(), amps, top, ambient).drop_V[0, 0])
    return math.sqrt(fully * float(law.body.forward_V(amps, ambient).item()))


@lru_cache(maxsize=16)
def _band(text: str, junction_C: float) -> SupplyBand:
    file = StageFile.model_validate_json(text)
    stage, sweep = build_stage(file, "stage.toml"), file.supply_sweep
    assert sweep is not None
    amps = sweep.current_A or file.stage.current_nominal_A
    # The port is a little below what is programmed: leads drop some.
    listed = np.array([LOWER * sweep.voltages_V[0], *sweep.voltages_V])
    places = np.arange(FINER * (listed.size - 1) + 1) / FINER
    volts = np.interp(places, np.arange(listed.size), listed)
    boards = stage.draw(SCENARIO_SAMPLES, SEED, corners=True)
    many = forward(stage, boards, amps, volts, junction_C)
    one = forward(stage, stage.typical(), amps, volts, junction_C)
    drops, typical = (np.where(f.carried, f.drop_V, np.inf) for f in (many, one))
    low, high = np.percentile(drops, BAND_PERCENT, axis=0, method="nearest")
    level = on_level(stage)
    useful = next(
        (limit.max_V for limit in file.limits.drop if abs(limit.current_A / amps - 1) < SAME), None
    )
    gates = np.zeros((1, volts.size)) if many.gate_V is None else many.gate_V
    gates = np.where(many.carried, gates, np.nan)
    typical_V, low_V, high_V = (
        np.where(np.isfinite(of), of, np.nan) for of in (typical[0], low, high)
    )
    return SupplyBand(
        volts, typical_V, low_V, high_V, _edge(gates, np.fmin), _edge(gates, np.fmax), level,
        None if level is None else _onset(volts, drops, typical, level),
        None if useful is None or level is None else _onset(volts, drops, typical, useful),
    )  # fmt: skip


def _edge(values: Floats, of: np.ufunc) -> Floats:
    """The least or the most over the boards, shape (points,); nan where no board has any."""
    return np.asarray(of.reduce(values, axis=0), dtype=np.float64)


def gate_promise(
    stage: Stage, drawn: Sample, current_A: float, supply_V: float, junction_C: float
) -> Promise | None:
    """Gate against source of the main part, with its sign; None without a gate."""
    many = forward(stage, drawn, current_A, supply_V, junction_C).gate_V
    one = forward(stage, stage.typical(), current_A, supply_V, junction_C).gate_V
    return None if many is None or one is None else _promise(many[:, 0], float(one[0, 0]))


def _promise(many: Floats, one: float) -> Promise | None:
    if not (np.isfinite(many).all() and np.isfinite(one)):
        return None
    low, high = np.percentile(many, BAND_PERCENT)
    return Promise(float(one), float(low), float(high))


def _onset(volts: Floats, drops: Floats, typical: Floats, level_V: float) -> Onset:
    many, one = onsets(volts, drops, level_V), onsets(volts, typical, level_V)
    return Onset(_promise(many, float(one[0])), float(many.min()), float(many.max()))


def onsets(volts: Floats, drops: Floats, level_V: float) -> Floats:
    """Where each board's drop comes down to a level for good as the voltage rises, shape (boards,).

    volts: rising, shape (points,); drops: shape (boards, points), infinite where the current is not
    carried. The lowest voltage for a board that is below the level there already; infinite for one
    that never gets there. Between two points along the logarithm of the drop.
    """
    held = np.flip(np.logical_and.accumulate(np.flip(drops <= level_V, axis=1), axis=1), axis=1)
    first = volts.size - held.sum(axis=1)
    found = np.full(drops.shape[0], np.inf)
    found[first == 0] = volts[0]
    for board in np.nonzero((first > 0) & (first < volts.size))[0]:
        at = first[board]
        below, above = drops[board, at], drops[board, at - 1]
        share = np.log(level_V / below) / np.log(above / below) if np.isfinite(above) else 0.5
        found[board] = volts[at] - share * (volts[at] - volts[at - 1])
    return found
