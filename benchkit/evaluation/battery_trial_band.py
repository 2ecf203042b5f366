"""What the datasheets promise of a stage in the states of a battery trial, with the bench's own
supplies and resistors around it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from benchkit.evaluation.battery_trial_circuits import Around, Spread, battery_A, solved
from benchkit.evaluation.verdict import Promise
from benchkit.files import StageFile
from benchkit.prediction.predict import BAND_PERCENT, GATE_SAMPLES, SEED
from benchkit.stage import Sample, Stage, build_stage

VOLTS_SHARE, VOLTS_V = 0.005, 0.02
"""How far a supply's voltage may be from what was asked: nobody declares it (judgement)."""
LIMIT_SHARE, LIMIT_A = 0.02, 0.01
"""The same of its current limit: no further than the guard lets its read-back be."""
OHMS_SHARE = 0.05
"""What a declared resistor may be off by: nobody measures it (judgement)."""
OF_NO_SHEET_A = 10e-6
"""What a part whose sheet gives no leakage may leak without remark (judgement)."""


@dataclass(frozen=True)
class StateBand:
    """current: out of the battery, of a flat one into it. least_A, most_A, lowest_V: of all
    samples, those with every part at its limit too; lowest_V of the guarded port. conducts: whether
    the typical board does, or charges. share: of the samples that do."""

    current: Promise
    guarded: Promise
    least_A: float
    most_A: float
    lowest_V: float
    conducts: bool
    share: float

    def agrees(self, *, conducts: bool) -> bool:
        """Whether some board within tolerance does what was found."""
        return self.share > 0 if conducts else self.share < 1


def state_bands(
    stage: Stage, around: Around, state: str, case_C: float
) -> dict[float, StateBand]:  # fmt: skip
    """By the voltages of the stand-in in a state; worked out once for all boards of a stage that
    are as warm, to a kelvin."""
    warm = round(case_C) if np.isfinite(case_C) else round(stage.file.stage.ambient_nominal_C)
    return dict(_bands(stage.file.model_dump_json(), around, state, float(warm)))


@lru_cache(maxsize=8)
def _drawn(text: str) -> tuple[Stage, Sample]:
    stage = build_stage(StageFile.model_validate_json(text), "stage.toml")
    return stage, stage.draw(GATE_SAMPLES, SEED, corners=True)


@lru_cache(maxsize=32)
def _bands(
    text: str, around: Around, state: str, case_C: float
) -> tuple[tuple[float, StateBand], ...]:
    stage, boards = _drawn(text)
    volts = around.volts(state)
    count, flows = len(volts), around.flows_A(state)
    many = solved(
        stage, boards.repeated(count), around, state, np.tile(np.array(volts), boards.size),
        _spread(boards.size * count), case_C,
    )  # fmt: skip
    one = solved(
        stage, stage.typical().repeated(count), around, state, np.array(volts), Spread(), case_C
    )
    amps, guarded = (
        np.where(many.solution.settled, values, np.nan).reshape(boards.size, count)
        for values in (battery_A(state, many.exposed_A), many.guarded_V)
    )
    low, high = np.nanpercentile([amps, guarded], BAND_PERCENT, axis=1)
    nominal = battery_A(state, one.exposed_A)
    return tuple(
        (
            v,
            StateBand(
                Promise(float(nominal[k]), float(low[0, k]), float(high[0, k])),
                Promise(float(one.guarded_V[k]), float(low[1, k]), float(high[1, k])),
                float(np.nanmin(amps[:, k])), float(np.nanmax(amps[:, k])),
                float(np.nanmin(guarded[:, k])), bool(nominal[k] >= flows),
                float(np.nanmean(amps[:, k] >= flows)),
            ),
        )
        for k, v in enumerate(volts)
    )  # fmt: skip


def _spread(size: int) -> Spread:
    chance = np.random.default_rng(SEED)

    def within(limit: float, middle: float = 0.0) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        return middle + limit * chance.uniform(-1, 1, size)

    return Spread(
        within(VOLTS_SHARE, 1.0), within(VOLTS_V), within(LIMIT_SHARE, 1.0), within(LIMIT_A),
        within(OHMS_SHARE, 1.0), within(0.5, 0.5),
    )  # fmt: skip
