"""What the pictures of a prediction need beside its own figures: curves with their bands.

A few hundred boards are enough for a line one can see; the figures of ``predict`` come from more.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.files.parts import NMosfet
from benchkit.parts.fuse_points import FuseModel
from benchkit.prediction.coordination import worked_share
from benchkit.prediction.forward import forward
from benchkit.prediction.fuse import fuse_of
from benchkit.prediction.heat import derating, working_point
from benchkit.prediction.predict import BAND_PERCENT, SEED
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]

BOARDS = 200
LOWEST_V = 0.3
"""Where the curves against supply voltage begin."""
BEYOND = 1.05
"""They end at this many times the highest supply voltage, or the gate's if that is near."""
GATE_NEAR = 1.6
"""Up to this many times the highest supply voltage the gate's own highest is drawn."""


@dataclass(frozen=True)
class Band:
    """One quantity against ``at``: a typical board, and the bounds of 95 % of the boards drawn.

    Every array has shape (points,); nan where there is no figure to give.
    """

    at: Floats
    typical: Floats
    low: Floats
    high: Floats


@dataclass(frozen=True)
class Curves:
    """Made by ``curves``.

    drop: volts against amperes, steady state, at nominal supply voltage and ambient. corners: the
    same of the boards whose every part is at its limit, least and most drop. supply_drop and
    gate: volts against supply volts at the nominal current, with the main part's junction at
    ``junction_C``; gate positive the way that turns the channel on. derated: amperes against
    ambient in degrees Celsius. fuse_A: what the fuse may carry for good at those ambients.
    None where a stage has no such curve.
    """

    boards: int
    junction_C: float
    drop: Band
    corners: tuple[Floats, Floats]
    supply_drop: Band | None
    gate: Band | None
    derated: Band | None
    ambient_C: Floats
    fuse_A: Floats | None

    def nominal_drop(self, current_A: float) -> tuple[float, float, float]:
        """Typical, low and high drop at the current drawn nearest to this one."""
        k = int(np.argmin(np.abs(self.drop.at - current_A)))
        return float(self.drop.typical[k]), float(self.drop.low[k]), float(self.drop.high[k])


def curves(
    stage: Stage, highest_gate_V: float | None = None, boards: int = BOARDS, seed: int = SEED
) -> Curves:
    """Calculate every curve of a stage from ``boards`` boards drawn within tolerance.

    highest_gate_V: the highest supply voltage for the gate, to be on the scale where it is near.
    """
    working = stage.file.stage
    drawn = stage.draw(boards, seed)
    supply, ambient = working.supply_nominal_V, working.ambient_nominal_C
    amps = _currents(stage)
    settled = [
        working_point(stage, sample, amps, supply, ambient).drop_V
        for sample in (stage.typical(), drawn, stage.corner(-1), stage.corner(1))
    ]
    warm = working_point(stage, stage.typical(), working.current_nominal_A, supply, ambient)
    junction = float(warm.junction_C[0, 0])
    if not np.isfinite(junction):
        junction = ambient
    drop, gate = None, None
    if stage.gate_nodes is not None:
        drop, gate = _against_supply(stage, drawn, _volts(stage, highest_gate_V), junction)
    limit = stage.main_part.junction_max_C
    ambients = np.linspace(min(ambient, 25.0), limit, 51)
    derated = None
    if stage.conducts != "lead":
        derated = _band(
            ambients,
            *(derating(stage, s, supply, ambients, limit) for s in (stage.typical(), drawn)),
        )
    return Curves(
        boards, junction, _band(amps, settled[0], settled[1]), (settled[2][0], settled[3][0]),
        drop, gate, derated, ambients, _fuse(stage, ambients),
    )  # fmt: skip


def _band(at: Floats, typical: Floats, drawn: Floats) -> Band:
    low, high = np.percentile(drawn, BAND_PERCENT, axis=0)
    return Band(at, typical[0], low, high)


def _currents(stage: Stage) -> Floats:
    """The swept currents, the nominal and the highest one, and enough between them for a line."""
    working, swept = stage.file.stage, stage.file.sweep.currents_A
    first, last = swept[0], working.current_max_A
    spaced = np.geomspace if stage.conducts == "junction" else np.linspace
    fine = spaced(min(first, working.current_nominal_A), last, 24)
    return np.unique(np.concatenate([fine, swept, [working.current_nominal_A]]))


def _volts(stage: Stage, highest_gate_V: float | None) -> Floats:
    """From nearly nothing upwards, close together where a channel begins to conduct."""
    working = stage.file.stage
    top = working.supply_max_V
    if highest_gate_V is not None and top < highest_gate_V <= GATE_NEAR * top:
        top = highest_gate_V
    fine = np.geomspace(LOWEST_V, max(BEYOND * top, 2 * LOWEST_V), 60)
    return np.unique(np.append(fine, working.supply_nominal_V))


def _against_supply(
    stage: Stage, drawn: Sample, volts: Floats, junction_C: float
) -> tuple[Band, Band]:
    """Drop and gate voltage.

    A circuit whose load draws the nominal current whatever it sees has a solution with more drop
    than there is supply voltage. No load draws that: all that the supply gives is dropped, and
    the gate's voltage there is nobody's.
    """
    amps = stage.file.stage.current_nominal_A
    found = [forward(stage, s, amps, volts, junction_C) for s in (stage.typical(), drawn)]
    typical, band = (np.minimum(one.drop_V, volts) for one in found)
    carried = np.where((band < volts).all(axis=0) & (typical[0] < volts), 1.0, np.nan)
    way = 1.0 if isinstance(stage.main_part, NMosfet) else -1.0
    gates = [way * carried * one.gate_V for one in found if one.gate_V is not None]
    return _band(volts, typical, band), _band(volts, *gates)


def _fuse(stage: Stage, ambient_C: Floats) -> Floats | None:
    reference = fuse_of(stage)
    if reference is None:
        return None
    model = stage.models[reference]
    assert isinstance(model, FuseModel)
    shares = [worked_share(model, float(ambient)) for ambient in ambient_C]
    return model.part.rated_current_A * np.array(shares)
