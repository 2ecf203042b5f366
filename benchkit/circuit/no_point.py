"""Where a network has no operating point, and why, in words.

A constant-current load has no say in its voltage. Where nothing carries its current, the voltage
across it turns round and runs away: a real load would have stopped drawing at zero volts, so the
network has no operating point at which it draws what was asked. The solver's shunts, or a path of
megohms, may still give the equations a solution at some negative voltage; that one is named here
too.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.elements import CurrentLoad
from benchkit.circuit.network import Network
from benchkit.circuit.solver import FARTHEST_V, TOLERANCE, Solution

Flags = NDArray[np.bool_]


def without_point(circuit: Network, solution: Solution) -> Flags:
    """Entries in which a load would have to drive its current itself, shape (batch,).

    A ``CurrentLoad`` of negative current is a source and may do so up to FARTHEST_V.
    """
    found = np.zeros(solution.residual.shape, dtype=bool)
    for element in circuit.elements:
        if isinstance(element, CurrentLoad):
            found |= _undrawn(element, solution)
    return found


def reason(circuit: Network, solution: Solution, entry: int) -> str | None:
    """Why one entry has no operating point, or is not solved; None where it has one."""
    for element in circuit.elements:
        if isinstance(element, CurrentLoad) and _undrawn(element, solution)[entry]:
            amps = float(np.broadcast_to(element.amps, solution.residual.shape)[entry])
            volts = float(solution.between(*element.nodes)[entry])
            end = (
                f"{volts:.3g} V across it" if solution.settled[entry]
                else f"beyond {volts:.3g} V across it, where the solver stopped"
            )  # fmt: skip
            if amps > 0:
                return (
                    f"nothing carries the {amps:.3g} A of {element.name}: it would have to drive "
                    f"them itself, at {end}"
                )
            return f"nothing carries the {-amps:.3g} A that {element.name} drives: {end}"
    if solution.settled[entry]:
        return None
    highest = max(abs(float(volts[entry])) for volts in solution.volts.values())
    if highest >= FARTHEST_V:
        return f"a voltage runs away: {highest:.3g} V, where the solver stopped"
    return (
        f"no operating point was found: {float(solution.residual[entry]):.1e} of the largest "
        f"current is left over at a node, more than {TOLERANCE:g}"
    )


def _undrawn(load: CurrentLoad, solution: Solution) -> Flags:
    across = solution.between(*load.nodes)
    amps = np.broadcast_to(np.asarray(load.amps, dtype=float), across.shape)
    far: Flags = np.abs(across) >= FARTHEST_V
    return np.where(amps > 0, across < 0, far & (amps * across < 0))
