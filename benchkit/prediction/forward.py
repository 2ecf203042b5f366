"""Right way round and carrying its working current: what the stage drops and burns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import GROUND, CurrentLoad, Emf, Solution, network, solve
from benchkit.circuit.network import Element
from benchkit.circuit.no_point import without_point
from benchkit.prediction.part_state import part_states
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

BATTERY_OHM = 1e-3


@dataclass(frozen=True)
class Forward:
    """Each array has shape (boards, conditions).

    drop_V: from the port that feeds to the port that is fed. loss_W: of the whole stage.
    main_W: of its main part alone. gate_V: gate against source of the main part, with its sign,
    None without a gate. carried: whether the stage carries the current at all; elsewhere the other
    figures mean nothing.
    """

    drop_V: Floats
    loss_W: Floats
    main_W: Floats
    gate_V: Floats | None
    residual: Floats
    carried: Flags


def forward(
    stage: Stage,
    sample: Sample,
    current_A: Floats | float,
    supply_V: Floats | float,
    junction_C: Floats | float,
) -> Forward:
    """Solve ``sample.size`` boards at every condition.

    current_A, supply_V and junction_C broadcast to (boards, conditions) or (conditions,). The
    supply is on the exposed port of a stage that guards a load, and on the guarded port of one
    that guards a supply from its battery.
    """
    wide = np.broadcast_shapes(
        (1, 1), np.shape(current_A), np.shape(supply_V), np.shape(junction_C), (sample.size, 1)
    )
    amps, volts, temps = (
        np.broadcast_to(np.asarray(a, dtype=float), wide).ravel()
        for a in (current_A, supply_V, junction_C)
    )
    elements = stage.elements(sample.repeated(wide[1]), temps)
    solution = _solve(stage, elements, amps, volts, _guess(stage, wide, amps, volts, temps))
    fed, drawn = _ports(stage)
    drop = solution.between(*fed) - solution.between(*drawn)
    states = part_states(elements, stage.main, stage.wiring.parts[stage.main], solution.volts)
    gate = None
    if stage.gate_nodes is not None:
        gate = solution.between(*stage.gate_nodes).reshape(wide)
    return Forward(
        drop.reshape(wide), (drop * amps).reshape(wide), states.power_W.reshape(wide), gate,
        solution.residual.reshape(wide),
        (solution.settled & ~without_point(solution.circuit, solution)).reshape(wide),
    )  # fmt: skip


def _guess(
    stage: Stage, wide: tuple[int, ...], amps: Floats, volts: Floats, temps: Floats
) -> dict[str, Floats]:
    """Where to begin: fed through, and for many boards where the typical one is."""
    (plus, minus), conditions = _ports(stage)[1], wide[1]
    some = slice(None, conditions)
    typical = stage.elements(stage.typical().repeated(conditions), temps[some])
    if stage.guards == "load":
        through = volts[some] - 0.5
        first = {plus: through} if plus != GROUND else {minus: -through}
        if wide[0] < 8:
            return {node: np.tile(value, wide[0]) for node, value in first.items()}
    else:
        # A charger's switch may be on only while there is a battery: begin with one.
        battery = Emf("drawn.battery", (plus, minus), volts[some], BATTERY_OHM)
        circuit = network([*typical, battery], held=_fed(stage, volts[some]))
        first = solve(circuit, conditions, follow=True).volts
    found = _solve(stage, typical, amps[some], volts[some], first).volts
    return {node: np.tile(value, wide[0]) for node, value in found.items()}


def _solve(
    stage: Stage, elements: list[Element], amps: Floats, volts: Floats, start: dict[str, Floats]
) -> Solution:
    load = CurrentLoad("drawn.load", _ports(stage)[1], amps)
    circuit = network([*elements, load], held=_fed(stage, volts))
    return solve(circuit, amps.size, start=start)


def _fed(stage: Stage, volts: Floats) -> dict[str, Floats]:
    """The supply, as what it holds."""
    plus, minus = _ports(stage)[0]
    return {plus: volts} if minus == GROUND else {minus: -volts}


def _ports(stage: Stage) -> tuple[tuple[str, str], tuple[str, str]]:
    """The port that feeds the stage and the one that it feeds, plus first."""
    ports = stage.ports
    exposed = ports.exposed_plus, ports.exposed_minus
    guarded = ports.guarded_plus, ports.guarded_minus
    return (exposed, guarded) if stage.guards == "load" else (guarded, exposed)
