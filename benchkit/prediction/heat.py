"""The electrothermal working point: loss warms the junction, and warmth changes the loss.

    Tj = Ta + (Rca + Rjc) P(Tj)

is solved by Newton's method from ambient upwards. Where the loss grows with temperature (a
channel, a leaking junction) the function is convex, so the iteration climbs to the lowest solution
from below, and the slope reaching one before a solution is found means that there is none: it runs
away.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.prediction.forward import forward
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

BEYOND_C = 250.0
"""A junction hotter than this is counted as run away: no law here is valid there."""
STEP_K = 0.5
CLOSE_K = 1e-5


@dataclass(frozen=True)
class WorkingPoint:
    """Steady state; each array has shape (boards, conditions).

    nan where it runs away, and where the stage does not carry the current at all.
    """

    drop_V: Floats
    loss_W: Floats
    case_C: Floats
    junction_C: Floats
    runs_away: Flags


def settled_junction(
    loss: Callable[[Floats], Floats], ambient_C: Floats, to_ambient_K_per_W: Floats
) -> tuple[Floats, Flags]:
    """Junction temperature at which ``loss`` keeps itself, and where there is none.

    ambient_C has shape (boards, conditions) and to_ambient_K_per_W broadcasts to it. ``loss`` takes
    junction temperatures of shape (boards, n * conditions), n times the conditions in a row, and
    gives watts.
    """
    conditions = ambient_C.shape[1]
    junction = ambient_C.copy()
    away = np.zeros(junction.shape, dtype=bool)
    for _ in range(40):
        both = loss(np.concatenate([junction, junction + STEP_K], axis=1))
        now, later = both[:, :conditions], both[:, conditions:]
        left = ambient_C + to_ambient_K_per_W * now - junction
        slope = to_ambient_K_per_W * (later - now) / STEP_K - 1
        away |= (left > 0) & ((slope >= 0) | (junction >= BEYOND_C))
        move = np.where(away, 0.0, np.clip(-left / np.where(slope < 0, slope, -1.0), -60, 60))
        junction = np.clip(junction + move, -80.0, BEYOND_C)
        if np.all(away | (np.abs(move) < CLOSE_K)):
            break
    return junction, away | (junction >= BEYOND_C)


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

    def loss(junction: Floats) -> Floats:
        times = junction.shape[1] // wide[1]
        return forward(
            stage, sample, np.tile(amps, (1, times)), np.tile(volts, (1, times)), junction
        ).main_W

    junction, away = settled_junction(loss, ambient, to_case + stage.junction_to_case_K_per_W)
    final = forward(stage, sample, amps, volts, junction)
    nan = np.where(away | ~final.carried, np.nan, 1.0)
    return WorkingPoint(
        final.drop_V * nan, final.loss_W * nan, (ambient + to_case * final.main_W) * nan,
        junction * nan, away,
    )  # fmt: skip


def derating(
    stage: Stage, sample: Sample, supply_V: float, ambient_C: Floats, junction_limit_C: float
) -> Floats:
    """Highest continuous current at each ambient that keeps the junction at its limit.

    Returns amperes, shape (boards, len(ambient_C)), never above stage.current_max_A: at the limit
    the loss allowed is (Tlimit - Ta) / (Rca + Rjc), and the loss at that junction temperature
    rises with current, so one sweep of currents at the limit answers for every ambient. Where the
    part loses more than that at no current at all, nothing is left to carry.
    """
    most = stage.file.stage.current_max_A
    amps = np.concatenate([[most * 1e-6], np.linspace(most / 200, most, 200)])
    loss = forward(stage, sample, amps, supply_V, junction_limit_C).main_W
    whole = sample.case_to_ambient_K_per_W + stage.junction_to_case_K_per_W
    allowed = np.maximum(junction_limit_C - ambient_C, 0.0) / whole[:, None]
    carried = np.stack([np.interp(allowed[k], loss[k], amps) for k in range(sample.size)])
    return np.where(allowed <= loss[:, :1], 0.0, carried)
