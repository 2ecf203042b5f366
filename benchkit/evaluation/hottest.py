"""From the measured board to the hottest enclosure and the highest current.

    Tc = Ta + R(P) P,   Tj = Tc + Rjc P,   P = I V(I, Tj)

R is the measured thermal resistance at the measured loss. Natural convection makes it fall as the
rise grows: laminar convection alone gives a heat transfer coefficient proportional to the rise to
the power 1/4 (Incropera and DeWitt, Fundamentals of Heat and Mass Transfer), so R falls with P to
the power 0.2 at most, and not at all where conduction rules. The exponent is taken in the middle,
-0.1, with limits 0 and -0.2. V at the working temperature is the measured drop, carried by the
temperature law of the datasheet; that step is trusted to a tenth.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from benchkit.evaluation.soak import Soak
from benchkit.evaluation.sources import rectangular
from benchkit.evaluation.sweep import DropAt
from benchkit.metrology import Budget, Component
from benchkit.prediction.forward import forward
from benchkit.stage import Stage

CONVECTION_EXPONENT, CONVECTION_LIMIT = -0.1, 0.1
TEMPERATURE_LAW_SHARE = 0.1
BEYOND_C = 300.0


@dataclass(frozen=True)
class Hottest:
    """Case and junction at the highest ambient and current; nan where it runs away."""

    case_C: float
    case_budget: Budget
    junction_C: float
    junction_budget: Budget
    loss_W: float
    reach: float
    """How many times the measured loss that is."""


@dataclass(frozen=True)
class _Inputs:
    resistance: float
    exponent: float
    drop_share: float
    law_share: float


def hottest(stage: Stage, soak: Soak, top: DropAt) -> Hottest:
    """Extrapolate; ``top`` is the drop measured nearest to the highest current."""
    working = stage.file.stage
    scale = working.current_max_A / top.current_A
    part_lag = stage.main_part.junction_to_case_K_per_W
    measured_junction = top.case_C + part_lag * top.drop_V * top.current_A
    law = _temperature_law(stage, measured_junction)

    def point(inputs: _Inputs) -> tuple[float, float, float]:
        case = junction = working.ambient_max_C
        loss = 0.0
        for _ in range(300):
            ratio = 1 + (law(junction) - 1) * inputs.law_share
            loss = working.current_max_A * scale * top.drop_V * inputs.drop_share * ratio
            rise = inputs.resistance * (loss / soak.late_loss_W) ** inputs.exponent * loss
            case = working.ambient_max_C + rise
            new = case + part_lag * loss
            if new > BEYOND_C:
                return math.nan, math.nan, loss
            if abs(new - junction) < 1e-9:
                break
            junction = new
        return case, junction, loss

    base = _Inputs(soak.resistance_K_per_W, CONVECTION_EXPONENT, 1.0, 1.0)
    case, junction, loss = point(base)
    drop_u = top.budget.u / top.drop_V
    steps: list[tuple[str, _Inputs]] = [
        (
            "convection against rise",
            _Inputs(base.resistance, base.exponent + CONVECTION_LIMIT, 1.0, 1.0),
        ),
        (
            "temperature law of the part",
            _Inputs(base.resistance, base.exponent, 1.0, 1.0 + TEMPERATURE_LAW_SHARE),
        ),
    ]
    budgets = []
    by_resistance = point(_Inputs(base.resistance * 1.001, base.exponent, 1.0, 1.0))
    by_drop = point(_Inputs(base.resistance, base.exponent, 1.0 + max(drop_u, 1e-6), 1.0))
    for which, value in ((0, case), (1, junction)):
        slope_r = (by_resistance[which] - value) / (0.001 * base.resistance)
        slope_v = (by_drop[which] - value) / (max(drop_u, 1e-6) * top.drop_V)
        extra = [rectangular(name, point(inputs)[which] - value) for name, inputs in steps]
        joint = Budget.linear([(slope_r, soak.resistance_budget), (slope_v, top.budget)])
        budgets.append(Budget([*joint.components, *extra]))
    if math.isnan(junction):
        none = Budget([Component("runs away", math.inf)])
        budgets = [none, none]
    return Hottest(case, budgets[0], junction, budgets[1], loss, loss / soak.late_loss_W)


def _temperature_law(stage: Stage, from_C: float) -> Callable[[float], float]:
    """The datasheet's drop at a temperature over that at ``from_C``, interpolated."""
    import numpy as np

    working = stage.file.stage
    grid = np.linspace(-40.0, BEYOND_C, 69)
    drops = forward(
        stage, stage.typical(), working.current_max_A, working.supply_nominal_V, grid
    ).drop_V[0]
    base = float(np.interp(from_C, grid, drops))
    return lambda junction_C: float(np.interp(junction_C, grid, drops)) / base
