"""The operating point that a scenario's circuits lead to, one after the other."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import GROUND, Channel, Network, Solution, network, solve
from benchkit.circuit.network import terminal_currents
from benchkit.prediction.connections import (
    SCENARIOS,
    Conditions,
    Connection,
    Surroundings,
)
from benchkit.prediction.part_state import PartStates, own_elements, part_states
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]

APART_V = 0.05
"""Two solutions further apart than this at any node are two operating points."""


@dataclass(frozen=True)
class OperatingPoint:
    """A solved circuit; every array has shape (batch,)."""

    stage: Stage
    connection: Connection
    circuit: Network
    solution: Solution

    @property
    def exposed_A(self) -> Floats:
        """Current into the exposed port at its plus terminal."""
        plus = self.stage.ports.exposed_plus
        into = np.zeros(self.solution.residual.shape)
        for element in self.connection.exposed:
            currents = terminal_currents(element, self.solution.volts)
            for node, amps in zip(element.nodes, currents, strict=True):
                if node == plus:
                    into = into - amps
        return into

    @property
    def exposed_V(self) -> Floats:
        """Plus terminal against minus terminal."""
        return self.solution.between(self.stage.ports.exposed_plus, self.stage.ports.exposed_minus)

    @property
    def guarded_V(self) -> Floats:
        """Plus terminal against minus terminal."""
        return self.solution.between(self.stage.ports.guarded_plus, self.stage.ports.guarded_minus)

    def part(self, reference: str) -> PartStates:
        """What one part stands."""
        nodes = self.stage.wiring.parts[reference]
        return part_states(own_elements(self.circuit.elements, reference), reference, nodes,
                           self.solution.volts)  # fmt: skip


def connected(
    stage: Stage, around: Surroundings, name: str, at: Conditions
) -> Sequence[Connection]:
    """The circuits of a scenario, in order; ValueError for a name that is not in SCENARIOS."""
    if name not in SCENARIOS:
        raise ValueError(f"{name!r} is not a scenario: one of {', '.join(SCENARIOS)}")
    return SCENARIOS[name](stage, around, at)


def reached(
    stage: Stage,
    boards: Sample,
    steps: Sequence[Connection],
    junction_C: Floats | float,
    others_C: float,
    start: dict[str, Floats] | None = None,
) -> OperatingPoint:
    """Follow a scenario's circuits from everything at zero, or the last of them from ``start``."""
    inside = stage.elements(boards, junction_C, others_C)
    volts = start
    point: OperatingPoint | None = None
    for connection in steps if start is None else steps[-1:]:
        circuit = network([*inside, *connection.exposed, *connection.guarded])
        solution = solve(circuit, boards.size, volts, follow=start is None)
        point = OperatingPoint(stage, connection, circuit, solution)
        volts = solution.volts
    assert point is not None
    return point


def other_points(point: OperatingPoint, highest_V: float) -> list[OperatingPoint]:
    """Further operating points of the same circuit.

    Looked for from everything at zero, from everything at ``highest_V`` and from its opposite, and
    from the guarded side alone being live, gates at their sources.
    """
    reference, ports = point.solution, point.stage.ports
    found: list[Solution] = [reference]
    shape = reference.residual.shape
    starts = [
        {node: np.full(shape, level) for node in reference.volts}
        for level in (0.0, highest_V, -highest_V)
    ]
    live = {ports.guarded_plus: highest_V, ports.guarded_minus: -highest_V}
    live = {node: volts for node, volts in live.items() if node != GROUND}
    gates = [e.nodes for e in point.circuit.elements if isinstance(e, Channel)]
    live |= {gate: live[source] for _, gate, source in gates if source in live}
    starts.append({node: np.full(shape, volts) for node, volts in live.items()})
    for start in starts:
        other = solve(point.circuit, reference.residual.size, start)
        if other.settled.all() and all(_apart(other, known) for known in found):
            found.append(other)
    return [
        OperatingPoint(point.stage, point.connection, point.circuit, other) for other in found[1:]
    ]


def _apart(one: Solution, other: Solution) -> bool:
    return any(
        bool((np.abs(one.volts[node] - other.volts[node]) > APART_V).any()) for node in one.volts
    )
