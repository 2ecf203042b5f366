"""From the measured board to the hottest enclosure, the highest current, the worst supply voltage.

    Tc = Ta + R(P) P,   Tj = Tc + Rjc P,   P = I V(I, Tj)

R is the measured thermal resistance at the measured loss. What it is carried by, and how far each
step is trusted:

- Natural convection makes R fall as the rise grows. Laminar convection alone gives a heat transfer
  coefficient proportional to the rise to the power 1/4 (Incropera and DeWitt, Fundamentals of Heat
  and Mass Transfer), so R falls with P to the power 0.2 at most, and not at all where conduction
  rules: the exponent is -0.1 with limits 0 and -0.2.
- Air at the hottest ambient is not the air of the room: 3 % of R (common practice, no source).
- V at the working point is the measured drop times the datasheet law's ratio between there and
  where it was measured (current, junction temperature, supply voltage); the ratio's distance from
  one is trusted to a tenth.
- Rjc is a printed maximum; real parts lie between 0.6 and 1 times it (common practice, no source).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.soak import Soak
from benchkit.evaluation.sources import rectangular
from benchkit.evaluation.sweep import DropAt
from benchkit.metrology import Budget, Component
from benchkit.prediction.forward import forward
from benchkit.stage import Stage

Floats = NDArray[np.float64]

CONVECTION_EXPONENT, CONVECTION_LIMIT = -0.1, 0.1
AIR_LIMIT = 0.03
LAW_LIMIT = 0.1
LAG_SHARE, LAG_LIMIT = 0.8, 0.2
"""Centre and half-width of Rjc, as shares of the printed figure."""
BEYOND_C = 300.0
DRAWS, SEED = 2000, 20260101
RUNAWAY_SHARE = 0.025
CURVED = 1.05
"""Monte Carlo replaces the linear uncertainty where it is larger by more than this."""


@dataclass(frozen=True)
class Hottest:
    """Case and junction at the highest ambient and current; nan where it may run away."""

    case_C: float
    case_budget: Budget
    junction_C: float
    junction_budget: Budget
    loss_W: float
    reach: float
    """How many times the measured loss that is."""


@dataclass(frozen=True)
class _Errors:
    """How far each input is from its best value, in its own unit of error; arrays or numbers."""

    resistance: Floats | float = 0.0
    drop: Floats | float = 0.0
    convection: Floats | float = 0.0
    air: Floats | float = 0.0
    law: Floats | float = 0.0
    lag: Floats | float = 0.0


class _Board:
    """The working point of a measured board as a function of the errors of what it rests on."""

    def __init__(self, stage: Stage, soak: Soak, top: DropAt) -> None:
        working = stage.file.stage
        self._soak, self._top, self._ambient = soak, top, working.ambient_max_C
        self._current = working.current_max_A
        self._lag = stage.junction_to_case_K_per_W
        measured_at = top.case_C + LAG_SHARE * self._lag * top.drop_V * top.current_A
        self._grid = np.linspace(-40.0, BEYOND_C, 69)
        there = forward(
            stage, stage.typical(), working.current_max_A, working.supply_min_V, self._grid
        ).drop_V[0]
        here = forward(
            stage, stage.typical(), top.current_A, working.supply_nominal_V, measured_at
        ).drop_V[0, 0]
        self._ratio = there / here

    def at(self, errors: _Errors) -> tuple[Floats, Floats, Floats]:
        """Case, junction (nan where it runs away) and loss."""
        soak, top = self._soak, self._top
        resistance = soak.resistance_K_per_W * (1 + AIR_LIMIT * np.asarray(errors.air))
        resistance = resistance + soak.resistance_budget.u * np.asarray(errors.resistance)
        exponent = CONVECTION_EXPONENT + CONVECTION_LIMIT * np.asarray(errors.convection)
        drop = top.drop_V + top.budget.u * np.asarray(errors.drop)
        lag = self._lag * (LAG_SHARE + LAG_LIMIT * np.asarray(errors.lag))
        shape = np.broadcast_shapes(*(np.shape(v) for v in vars(errors).values()))
        junction = np.full(shape, self._ambient)
        case, loss = junction, np.zeros(shape)
        for _ in range(200):
            ratio = np.interp(junction, self._grid, self._ratio)
            ratio = 1 + (ratio - 1) * (1 + LAW_LIMIT * np.asarray(errors.law))
            loss = self._current * drop * ratio
            case = self._ambient + resistance * (loss / soak.late_loss_W) ** exponent * loss
            new = np.minimum(case + lag * loss, BEYOND_C)
            moved = float(np.max(np.abs(new - junction)))
            junction = new
            if moved < 1e-9:
                break
        # Still moving after so many rounds is as good as running away.
        away = (junction >= BEYOND_C) | (np.abs(case + lag * loss - junction) > 1e-3)
        return np.where(away, np.nan, case), np.where(away, np.nan, junction), loss


def hottest(stage: Stage, soak: Soak, top: DropAt) -> Hottest:
    """Extrapolate; ``top`` is the drop measured nearest to the highest current.

    Linear propagation with a budget; a Monte Carlo run beside it (JCGM 101) catches what the bend
    of the law adds near running away, and says when more than 2.5 % of it runs away: then there is
    no figure, and nothing can be decided.
    """
    board = _Board(stage, soak, top)
    case, junction, loss = (float(v) for v in board.at(_Errors()))
    draw = np.random.default_rng(SEED)
    flat = [draw.uniform(-1, 1, DRAWS) for _ in range(4)]
    drawn = board.at(_Errors(draw.standard_normal(DRAWS), draw.standard_normal(DRAWS), *flat))
    away = float(np.isnan(drawn[1]).mean())
    reach = loss / soak.late_loss_W
    if away > RUNAWAY_SHARE or math.isnan(junction):
        none = Budget([Component("may run away", math.inf)])
        return Hottest(math.nan, none, math.nan, none, loss, reach)
    budgets = []
    for which, value in ((0, case), (1, junction)):
        steps = [
            (name, float(board.at(_Errors(**{key: 0.1}))[which] - value) / 0.1)
            for name, key in (
                ("convection against rise", "convection"),
                ("air at the hottest ambient", "air"),
                ("law of the part", "law"),
                ("junction to case", "lag"),
            )
        ]
        by_resistance, by_drop = (
            float(board.at(_Errors(**{key: 0.1}))[which] - value) / 0.1 / u if u else 0.0
            for key, u in (("resistance", soak.resistance_budget.u), ("drop", top.budget.u))
        )
        joint = Budget.linear([(by_resistance, soak.resistance_budget), (by_drop, top.budget)])
        linear = Budget(
            [*joint.components, *(rectangular(name, step) for name, step in steps if step)]
        )
        budgets.append(_bent(linear, value, drawn[which]))
    return Hottest(case, budgets[0], junction, budgets[1], loss, reach)


def _bent(linear: Budget, value: float, drawn: Floats) -> Budget:
    """Add what Monte Carlo finds beyond the linear uncertainty, if that is worth it."""
    expanded = linear.expanded()
    half = float(np.nanpercentile(np.abs(drawn - value), 95))
    if half <= CURVED * expanded.U:
        return linear
    extra = math.sqrt((half / expanded.k) ** 2 - linear.u**2)
    return Budget([*linear.components, Component("bend of the law (Monte Carlo)", extra)])
