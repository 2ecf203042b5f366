"""What the datasheets promise of a clamp: its forward drop at a current, and its leakage."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import CurrentLoad, Emf, Resistor
from benchkit.evaluation.verdict import Promise
from benchkit.files import StageFile
from benchkit.prediction.connections import BLEEDER, SOURCE, STIFF_OHM, Connection
from benchkit.prediction.operating_point import OperatingPoint, reached
from benchkit.prediction.predict import BAND_PERCENT, SCENARIO_SAMPLES, SEED
from benchkit.stage import Sample, Stage, build_stage

Floats = NDArray[np.float64]

CLAMPS = ("clamp", "fused-clamp")
"""Topologies that conduct when reversed."""
METER_OHM, METER_RANGE = 1e7, 3.0
"""Across a guarded port with nothing but a voltmeter on it; the band spans this many times more and
less (common practice, no source)."""
STEP, STEP_K = 0.05, 10.0


@dataclass(frozen=True)
class DropBand:
    """The clamp's forward drop in V at one current: least, most of all samples, those with every
    part at its limit too. slope_ohm: of a typical one's drop with current; per_K: with junction
    temperature, in V/K."""

    drop: Promise
    least_V: float
    most_V: float
    slope_ohm: float
    per_K: float


@dataclass(frozen=True)
class LeakageBand:
    """What flows into the exposed plus terminal the right way round, in A."""

    leakage: Promise
    most_A: float


def driven(stage: Stage, boards: Sample, amps: Floats | float, junction_C: float) -> OperatingPoint:
    """A current the wrong way round through the stage, and a voltmeter on the guarded port."""
    ports = stage.ports
    source = CurrentLoad(SOURCE, (ports.exposed_plus, ports.exposed_minus), amps)
    meter = Resistor(BLEEDER, (ports.guarded_plus, ports.guarded_minus), METER_OHM)
    return reached(stage, boards, [Connection((source,), (meter,))], junction_C, junction_C)


def drop_band(stage: Stage, current_A: float, junction_C: float) -> DropBand:
    """At one current (A) and junction temperature (C)."""
    return _drop_band(stage.file.model_dump_json(), round(current_A, 7), round(junction_C, 1))


@lru_cache(maxsize=64)
def _drop_band(text: str, current_A: float, junction_C: float) -> DropBand:
    stage = _built(text)
    boards = stage.draw(SCENARIO_SAMPLES, SEED, corners=True)
    many = -driven(stage, boards, current_A, junction_C).guarded_V
    amps = current_A * np.array([1 - STEP, 1.0, 1 + STEP])
    below, middle, above = -driven(stage, stage.typical().repeated(3), amps, junction_C).guarded_V
    warm = -driven(stage, stage.typical(), current_A, junction_C + STEP_K).guarded_V
    low, high = np.percentile(many, BAND_PERCENT)
    return DropBand(
        Promise(float(middle), float(low), float(high)), float(many.min()), float(many.max()),
        float(above - below) / (2 * STEP * current_A), float(warm[0] - middle) / STEP_K,
    )  # fmt: skip


def leakage_band(stage: Stage, volts: float, case_C: float) -> LeakageBand:
    """At ``volts`` the right way round at the exposed port, the guarded one open."""
    return _leakage_band(stage.file.model_dump_json(), round(volts, 2), round(case_C, 1))


@lru_cache(maxsize=64)
def _leakage_band(text: str, volts: float, case_C: float) -> LeakageBand:
    stage = _built(text)
    boards = stage.draw(SCENARIO_SAMPLES, SEED, corners=True)
    spread = np.random.default_rng(SEED).uniform(-1, 1, boards.size)
    many = _leaking(stage, boards, volts, case_C, METER_OHM * METER_RANGE**spread)
    one = _leaking(stage, stage.typical(), volts, case_C, METER_OHM)
    low, high = np.percentile(many, BAND_PERCENT)
    return LeakageBand(Promise(float(one[0]), float(low), float(high)), float(many.max()))


def _leaking(
    stage: Stage, boards: Sample, volts: float, case_C: float, meter_ohm: Floats | float
) -> Floats:
    ports = stage.ports
    source = Emf(SOURCE, (ports.exposed_plus, ports.exposed_minus), volts, STIFF_OHM)
    meter = Resistor(BLEEDER, (ports.guarded_plus, ports.guarded_minus), meter_ohm)
    point = reached(stage, boards, [Connection((source,), (meter,))], case_C, case_C)
    return point.exposed_A


@lru_cache(maxsize=8)
def _built(text: str) -> Stage:
    return build_stage(StageFile.model_validate_json(text), "stage.toml")
