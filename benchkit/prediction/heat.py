"""The electrothermal working point: loss warms the junction, and warmth changes the loss.

    Tj = Ta + (Rca + Rjc) P(Tj)

is solved by Newton's method from ambient upwards. Where the loss grows with temperature (a
channel) the function is convex, so the iteration climbs to the lowest solution from below, and
the slope reaching one before a solution is found means that there is none: it runs away.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.prediction.forward import forward
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]

BEYOND_C = 300.0
"""A junction hotter than this is counted as run away: no law here is valid there."""


@dataclass(frozen=True)
class WorkingPoint:
    """Steady state; each array has shape (boards, conditions); nan where it runs away."""

    drop_V: Floats
    loss_W: Floats
    case_C: Floats
    junction_C: Floats
    runs_away: NDArray[np.bool_]


def working_point(
    stage: Stage,
    sample: Sample,
    current_A: Floats | float,
    supply_V: Floats | float,
    ambient_C: Floats | float,
) -> WorkingPoint:
    """Find the steady state of every board at every condition (shapes as in ``forward``)."""
    wide = np.broadcast_shapes(
        (sample.size, 1), np.shape(current_A), np.shape(supply_V), np.shape(ambient_C)
    )
    amps, volts, ambient = (
        np.broadcast_to(np.asarray(a, dtype=float), wide) for a in (current_A, supply_V, ambient_C)
    )
    to_case = sample.case_to_ambient_K_per_W[:, None]
    whole = to_case + stage.main_part.junction_to_case_K_per_W
    junction = ambient.copy()
    away = np.zeros(wide, dtype=bool)
    step_K = 0.5
    for _ in range(40):
        both = forward(
            stage, sample, np.concatenate([amps, amps], axis=1),
            np.concatenate([volts, volts], axis=1),
            np.concatenate([junction, junction + step_K], axis=1),
        ).loss_W  # fmt: skip
        loss, later = both[:, : wide[1]], both[:, wide[1] :]
        left = ambient + whole * loss - junction
        slope = whole * (later - loss) / step_K - 1
        away |= (left > 0) & ((slope >= 0) | (junction >= BEYOND_C))
        move = np.where(away, 0.0, np.clip(-left / np.where(slope < 0, slope, -1.0), -60, 60))
        junction = np.clip(junction + move, -80.0, BEYOND_C)
        if np.all(away | (np.abs(move) < 1e-6)):
            break
    away |= junction >= BEYOND_C
    final = forward(stage, sample, amps, volts, junction)
    nan = np.where(away, np.nan, 1.0)
    return WorkingPoint(
        final.drop_V * nan, final.loss_W * nan,
        (ambient + to_case * final.loss_W) * nan, junction * nan, away,
    )  # fmt: skip


def derating(
    stage: Stage, sample: Sample, supply_V: float, ambient_C: Floats, junction_limit_C: float
) -> Floats:
    """Highest continuous current at each ambient that keeps the junction at its limit.

    Returns amperes, shape (boards, len(ambient_C)), never above stage.current_max_A: at the limit
    the loss allowed is (Tlimit - Ta) / (Rca + Rjc), and the loss at that junction temperature
    rises with current, so one sweep of currents at the limit answers for every ambient.
    """
    most = stage.file.stage.current_max_A
    amps = np.linspace(most / 200, most, 200)
    loss = forward(stage, sample, amps, supply_V, junction_limit_C).loss_W
    whole = sample.case_to_ambient_K_per_W + stage.main_part.junction_to_case_K_per_W
    allowed = np.maximum(junction_limit_C - ambient_C, 0.0) / whole[:, None]
    return np.stack(
        [
            np.interp(allowed[k], np.concatenate([[0.0], loss[k]]), np.concatenate([[0.0], amps]))
            for k in range(sample.size)
        ]
    )
