"""Right way round and drawing: what the stage drops and burns at given conditions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import GROUND, CurrentLoad, Solution, network, solve
from benchkit.stage import Sample, Stage
from benchkit.topologies.base import EXPOSED, GUARDED

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Forward:
    """Each array has shape (boards, conditions)."""

    drop_V: Floats
    loss_W: Floats
    gate_V: Floats | None
    """Gate against source, in volts with its sign; None for a stage without a gate."""
    residual: Floats


def forward(
    stage: Stage,
    sample: Sample,
    current_A: Floats | float,
    supply_V: Floats | float,
    junction_C: Floats | float,
) -> Forward:
    """Solve ``sample.size`` boards at every condition.

    current_A, supply_V and junction_C broadcast to (boards, conditions) or (conditions,).
    """
    wide = np.broadcast_shapes(
        (1, 1), np.shape(current_A), np.shape(supply_V), np.shape(junction_C), (sample.size, 1)
    )
    amps, volts, temps = (
        np.broadcast_to(np.asarray(a, dtype=float), wide).ravel()
        for a in (current_A, supply_V, junction_C)
    )
    boards = sample.repeated(wide[1])
    solution = _solve(stage, boards, amps, volts, temps)
    drop = solution.between(EXPOSED, GUARDED)
    gate = None
    if stage.topology.control is not None:
        gate = solution.between(*stage.topology.control).reshape(wide)
    return Forward(
        drop.reshape(wide), (drop * amps).reshape(wide), gate, solution.residual.reshape(wide)
    )


def _solve(stage: Stage, boards: Sample, amps: Floats, volts: Floats, temps: Floats) -> Solution:
    circuit = network(
        [*stage.elements(boards, temps), CurrentLoad("load", (GUARDED, GROUND), amps)],
        held={EXPOSED: volts},
    )
    return solve(circuit, boards.size, start={GUARDED: volts - 0.5})
