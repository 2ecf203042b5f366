"""What the datasheets promise for the conditions a run is judged at, worked out once a stage."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.verdict import Promise
from benchkit.files import StageFile
from benchkit.prediction.forward import forward
from benchkit.prediction.heat import working_point
from benchkit.prediction.predict import BAND_PERCENT, SAMPLES, SEED
from benchkit.records.record import Record
from benchkit.stage import Sample, Stage, build_stage

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Promised:
    """A stage with its tolerance samples and what does not depend on the board measured."""

    stage: Stage
    drawn: Sample
    case_hottest: Promise | None
    junction_margin: Promise | None

    def drops(self, current_A: Floats, junction_C: Floats) -> list[Promise]:
        """Drop at each current and junction temperature, at the nominal supply voltage."""
        supply = self.stage.file.stage.supply_nominal_V
        band = forward(self.stage, self.drawn, current_A, supply, junction_C).drop_V
        typical = forward(self.stage, self.stage.typical(), current_A, supply, junction_C).drop_V[0]
        low, high = np.percentile(band, BAND_PERCENT, axis=0)
        return [
            Promise(float(t), float(a), float(b))
            for t, a, b in zip(typical, low, high, strict=True)
        ]

    def thermal_resistance(self) -> Promise:
        """Case to ambient."""
        low, high = np.percentile(self.drawn.case_to_ambient_K_per_W, BAND_PERCENT)
        return Promise(self.stage.file.heat.case_to_ambient_K_per_W, float(low), float(high))


def promised(record: Record) -> Promised:
    """The promises of a record's stage; a lot of one stage works them out once."""
    name = str(record.path / "inputs" / "stage.toml")
    build_stage(record.stage, name)  # complains with the run's own file name
    return _promised(record.stage.model_dump_json())


@lru_cache(maxsize=8)
def _promised(text: str) -> Promised:
    stage = build_stage(StageFile.model_validate_json(text), "stage.toml")
    drawn = stage.draw(SAMPLES, SEED)
    working = stage.file.stage
    conditions = (working.current_max_A, working.supply_min_V, working.ambient_max_C)
    many = working_point(stage, drawn, *conditions)
    one = working_point(stage, stage.typical(), *conditions)
    top = stage.main_part.junction_max_C
    return Promised(
        stage,
        drawn,
        _promise(many.case_C, one.case_C),
        _promise(top - many.junction_C, top - one.junction_C),
    )


def _promise(many: Floats, one: Floats) -> Promise | None:
    """None where some parts within tolerance run away: there is no figure to promise."""
    if np.isnan(many).any() or np.isnan(one).any():
        return None
    low, high = np.percentile(many, BAND_PERCENT)
    return Promise(float(one[0, 0]), float(low), float(high))
