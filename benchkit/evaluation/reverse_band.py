"""What the datasheets promise of a stage whose supply is crossed, at the voltages measured."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import Emf, Resistor
from benchkit.evaluation.reverse import Rung
from benchkit.evaluation.verdict import Promise
from benchkit.prediction.connections import BLEEDER, SOURCE, STIFF_OHM, Connection
from benchkit.prediction.operating_point import OperatingPoint, reached
from benchkit.prediction.predict import BAND_PERCENT, SCENARIO_SAMPLES, SEED
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]

BLEED_OHM, BLEED_RANGE = 200e3, 10.0
"""Across a guarded port with a load that draws nothing and a voltmeter on it: nobody prints it, so
the band spans this many times more and less (judgement)."""
BLEEDER_SHARE = 0.05
"""What a declared resistor may be off by: nobody measures it (judgement)."""


@dataclass(frozen=True)
class ReverseBand:
    """At one rung: current out of the exposed plus terminal (A) and how far below zero the guarded
    port is (V). least_A, most_A: of all samples, those with every part at its limit too."""

    leakage: Promise
    guarded: Promise
    least_A: float
    most_A: float
    most_V: float


def reverse_bands(
    stage: Stage, rungs: Sequence[Rung], bleeder_ohm: float | None = None
) -> list[ReverseBand]:
    """One a rung, at its measured voltage and case temperature.

    bleeder_ohm: the resistor that the bench file declares across the guarded port.
    """
    if not rungs:
        return []
    count = len(rungs)
    volts = np.array([r.voltage_V for r in rungs])
    warm = np.nan_to_num(np.array([r.case_C for r in rungs]), nan=25.0)
    boards = stage.draw(SCENARIO_SAMPLES, SEED, corners=True)
    chance = np.random.default_rng(SEED)
    bleed = BLEED_OHM * BLEED_RANGE ** chance.uniform(-1, 1, boards.size)
    usual = BLEED_OHM
    if bleeder_ohm is not None:
        own = bleeder_ohm * (1 + BLEEDER_SHARE * chance.uniform(-1, 1, boards.size))
        bleed, usual = 1 / (1 / bleed + 1 / own), 1 / (1 / BLEED_OHM + 1 / bleeder_ohm)
    many = crossed(
        stage, boards.repeated(count), np.tile(volts, boards.size), np.tile(warm, boards.size),
        np.repeat(bleed, count),
    )  # fmt: skip
    one = crossed(stage, stage.typical().repeated(count), volts, warm, usual)
    drawn_A, drawn_V = (
        np.where(many.solution.settled, -a, np.nan).reshape(boards.size, count)
        for a in (many.exposed_A, many.guarded_V)
    )
    low, high = np.nanpercentile([drawn_A, drawn_V], BAND_PERCENT, axis=1)
    return [
        ReverseBand(
            Promise(float(-one.exposed_A[k]), float(low[0, k]), float(high[0, k])),
            Promise(float(-one.guarded_V[k]), float(low[1, k]), float(high[1, k])),
            float(np.nanmin(drawn_A[:, k])), float(np.nanmax(drawn_A[:, k])),
            float(np.nanmax(drawn_V[:, k])),
        )
        for k in range(count)
    ]  # fmt: skip


def crossed(
    stage: Stage, boards: Sample, volts: Floats, case_C: Floats, bleed_ohm: Floats | float
) -> OperatingPoint:
    """A source the wrong way round at the exposed port, and next to nothing on the guarded one."""
    ports = stage.ports
    source = Emf(SOURCE, (ports.exposed_minus, ports.exposed_plus), volts, STIFF_OHM)
    bleeder = Resistor(BLEEDER, (ports.guarded_plus, ports.guarded_minus), bleed_ohm)
    return reached(stage, boards, [Connection((source,), (bleeder,))], case_C, float(case_C.mean()))
