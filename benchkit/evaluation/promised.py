"""What the datasheets promise for the conditions a run is judged at, worked out once a stage."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.verdict import Promise
from benchkit.files import StageFile
from benchkit.prediction.connections import surroundings
from benchkit.prediction.forward import forward
from benchkit.prediction.heat import working_point
from benchkit.prediction.predict import BAND_PERCENT, SAMPLES, SCENARIO_SAMPLES, SEED
from benchkit.prediction.scenarios import Scenario, scenario
from benchkit.records.record import Record
from benchkit.stage import Sample, Stage, build_stage

Floats = NDArray[np.float64]

GRID_C = np.array([-40.0, 0.0, 20.0, 40.0, 60.0, 90.0, 120.0, 180.0, 250.0])


@dataclass(frozen=True)
class Promised:
    """A stage with its tolerance samples and what does not depend on the board measured."""

    stage: Stage
    drawn: Sample
    case_hottest: Promise | None
    junction_margin: Promise | None
    scenarios: tuple[Scenario, ...]
    """Those that the stage must stand, each rating at the worst voltage, current and tolerance."""

    def drops(self, current_A: Floats, junction_C: Floats) -> list[Promise]:
        """Drop at currents of the stage file and any junction temperature, nominal supply.

        Interpolated between temperatures that are solved once a stage (GRID_C apart, where a drop
        is straight to better than a part in a thousand).
        """
        rows = [int(np.argmin(np.abs(self._currents - amps))) for amps in current_A]
        return [
            Promise(*(float(np.interp(t, GRID_C, table[k])) for table in self._tables))
            for k, t in zip(rows, junction_C, strict=True)
        ]

    @cached_property
    def _currents(self) -> Floats:
        file = self.stage.file
        soak = [file.soak.current_A] if file.soak is not None else []
        return np.unique([*file.sweep.currents_A, *soak])

    @cached_property
    def _tables(self) -> tuple[Floats, Floats, Floats]:
        """Typical, low and high drop, each of shape (currents, temperatures)."""
        supply = self.stage.file.stage.supply_nominal_V
        amps = np.repeat(self._currents, GRID_C.size)
        temps = np.tile(GRID_C, self._currents.size)
        shape = (self._currents.size, GRID_C.size)
        band = forward(self.stage, self.drawn, amps, supply, temps).drop_V
        typical = forward(self.stage, self.stage.typical(), amps, supply, temps).drop_V[0]
        low, high = np.percentile(band, BAND_PERCENT, axis=0)
        return typical.reshape(shape), low.reshape(shape), high.reshape(shape)

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
    around, few = surroundings(stage.file), stage.draw(SCENARIO_SAMPLES, SEED, corners=True)
    return Promised(
        stage,
        drawn,
        _promise(many.case_C, one.case_C),
        _promise(top - many.junction_C, top - one.junction_C),
        tuple(scenario(stage, few, name, around) for name in stage.must_stand),
    )


def _promise(many: Floats, one: Floats) -> Promise | None:
    """None where some parts within tolerance run away: there is no figure to promise."""
    if np.isnan(many).any() or np.isnan(one).any():
        return None
    low, high = np.percentile(many, BAND_PERCENT)
    return Promise(float(one[0, 0]), float(low), float(high))
