"""The whole prediction of a stage, as `benchkit predict` prints it and the reports show it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.files.parts import NMosfet, PMosfet
from benchkit.prediction.connections import SCENARIOS, surroundings
from benchkit.prediction.coordination import Coordination
from benchkit.prediction.forward import forward
from benchkit.prediction.heat import derating, working_point
from benchkit.prediction.scenarios import Scenario, scenario
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]

SAMPLES = 2000
SEED = 20260101
SCENARIO_SAMPLES = 200
"""For the scenarios, each followed from the state before it; two of them are the corners."""
GATE_SAMPLES = 60
BAND_PERCENT = (2.5, 97.5)
USEFUL_RATIO = 1.5
"""The lowest useful supply voltage is where the drop has grown to this many times its value at
the nominal supply voltage (common practice, no source)."""


@dataclass(frozen=True)
class DropRow:
    """Steady-state drop at one current; low and high bound 95 % of the tolerance samples."""

    current_A: float
    supply_V: float
    ambient_C: float
    nominal_V: float
    low_V: float
    high_V: float
    corner_low_V: float
    corner_high_V: float
    loss_W: float
    junction_C: float


@dataclass(frozen=True)
class Prediction:
    """See the design of `predict --json`; ``document`` spells it."""

    stage: str
    topology: str
    conditions: dict[str, float]
    drop: list[DropRow]
    scenarios: list[Scenario]
    case_C: float
    junction_C: float
    runs_away: bool
    derating: list[tuple[float, float]]
    lowest_useful_supply_V: float | None
    highest_gate_supply_V: float | None
    """Up to here the gate stays within its rating in every board within tolerance, looked for up
    to twice the stage's highest supply voltage; infinite where it stands that, None without one."""
    fuse: Coordination | None
    """In the scenario in which it does least, of those that the stage must stand."""
    fuse_scenario: str | None
    notes: list[str]
    worst_residual: float

    def document(self) -> dict[str, object]:
        """As JSON-ready values, with the contract's key names."""
        return {
            "stage": self.stage,
            "topology": self.topology,
            "conditions": self.conditions,
            "drop": [vars(row) for row in self.drop],
            "scenarios": {s.name: s.document() for s in self.scenarios},
            "heat": {
                "case_C": self.case_C,
                "junction_C": self.junction_C,
                "runs_away": self.runs_away,
                "derating": [{"ambient_C": t, "current_A": a} for t, a in self.derating],
            },
            "lowest_useful_supply_V": self.lowest_useful_supply_V,
            "highest_gate_supply_V": self.highest_gate_supply_V,
            **self._fuse(),
            "notes": self.notes,
            "worst_residual": self.worst_residual,
        }

    def _fuse(self) -> dict[str, object]:
        if self.fuse is None:
            return {}
        return {"fuse": {**self.fuse.document(), "scenario": self.fuse_scenario}}


def predict(stage: Stage, samples: int = SAMPLES, seed: int = SEED) -> Prediction:
    """Say what the datasheets promise. Bands come from ``samples`` seeded tolerance samples."""
    file, working = stage.file, stage.file.stage
    drawn = stage.draw(samples, seed)
    amps = np.array(file.sweep.currents_A)
    supply, ambient = working.supply_nominal_V, working.ambient_nominal_C
    band = working_point(stage, drawn, amps, supply, ambient)
    typical = working_point(stage, stage.typical(), amps, supply, ambient)
    # nan at a current where one sample runs away: the rest alone would flatter the band.
    low, high = np.percentile(band.drop_V, BAND_PERCENT, axis=0)
    corners = [
        working_point(stage, stage.corner(way), amps, supply, ambient).drop_V[0] for way in (-1, 1)
    ]
    rows = [
        DropRow(
            float(amps[k]), supply, ambient, float(typical.drop_V[0, k]), float(low[k]),
            float(high[k]), float(corners[0][k]), float(corners[1][k]),
            float(typical.loss_W[0, k]), float(typical.junction_C[0, k]),
        )
        for k in range(amps.size)
    ]  # fmt: skip
    # At the lowest supply voltage, where a channel's gate is driven least.
    hottest = working_point(
        stage, drawn, working.current_max_A, working.supply_min_V, working.ambient_max_C
    )
    ambients = np.linspace(min(ambient, 25.0), stage.main_part.junction_max_C, 26)
    limit = stage.main_part.junction_max_C
    curve = derating(stage, stage.corner(1), working.supply_min_V, ambients, limit)[0]
    away = bool(hottest.runs_away.any())
    around = surroundings(file)
    notes = [*stage.notes, *around.assumed]
    if not np.isfinite([row.nominal_V for row in rows]).all():
        notes.append(
            "where no drop is given a typical stage does not carry that current at "
            f"{supply:g} V, or runs away"
        )
    if away:
        notes.append(
            f"at {working.current_max_A:g} A and {working.ambient_max_C:g} C some parts within "
            "tolerance have no steady state: they run away"
        )
    residual = forward(stage, drawn, amps, supply, ambient).residual.max()
    gates = stage.draw(GATE_SAMPLES, seed, corners=True)
    few = stage.draw(SCENARIO_SAMPLES, seed, corners=True)
    scenarios = [scenario(stage, few, name, around) for name in SCENARIOS]
    return Prediction(
        working.name, working.topology,
        {
            "supply_nominal_V": supply, "current_nominal_A": working.current_nominal_A,
            "ambient_nominal_C": ambient, "samples": samples, "seed": seed,
            "band_percent": BAND_PERCENT[1] - BAND_PERCENT[0],
        },
        rows, scenarios,
        _worst(hottest.case_C, away), _worst(hottest.junction_C, away), away,
        [(float(t), float(a)) for t, a in zip(ambients, curve, strict=True)],
        _lowest_useful(stage), _highest_for_gate(stage, gates), *_weakest_fuse(scenarios), notes,
        max(float(residual), *(one.worst_residual for one in scenarios)),
    )  # fmt: skip


def _worst(values: Floats, away: bool) -> float:
    """The hottest 2.5 % are left out; where some run away there is no figure to give."""
    return float("inf") if away else float(np.percentile(values, BAND_PERCENT[1]))


def _lowest_useful(stage: Stage) -> float | None:
    """Where the board with the highest threshold the sheet allows is still really on.

    Only a channel has one: a junction drops the same from any supply voltage.
    """
    if stage.gate_nodes is None:
        return None
    working = stage.file.stage
    volts = np.linspace(0.5, working.supply_nominal_V, 120)
    drops = forward(
        stage, stage.corner(1), working.current_nominal_A, volts, working.ambient_nominal_C
    ).drop_V[0]
    good = drops <= USEFUL_RATIO * drops[-1]
    return float(volts[int(np.argmax(good))])


def _highest_for_gate(stage: Stage, sample: Sample) -> float | None:
    """None without a gate; infinite where it stands the whole range that is looked at."""
    part = stage.main_part
    if not isinstance(part, PMosfet | NMosfet):
        return None
    working = stage.file.stage
    volts = np.linspace(0.25 * working.supply_min_V, 2 * working.supply_max_V, 160)
    gate = forward(stage, sample, working.current_nominal_A, volts, working.ambient_max_C).gate_V
    assert gate is not None
    good = (np.abs(gate) <= part.gate_source_max_V).all(axis=0)
    return float("inf") if good.all() else float(volts[max(int(np.argmin(good)) - 1, 0)])


def _weakest_fuse(scenarios: list[Scenario]) -> tuple[Coordination | None, str | None]:
    found = [(one.fuse, one) for one in scenarios if one.fuse is not None]
    asked = [pair for pair in found if pair[1].required] or found
    if not asked:
        return None, None
    fuse, of = min(asked, key=lambda pair: (pair[0].coordinated, -pair[0].let_through_A2s))
    return fuse, of.name
