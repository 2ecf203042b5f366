"""The circuit of one moment: a board, what is at its ports, and what that holds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import Network, Solution, network, solve
from benchkit.circuit.network import Element
from benchkit.prediction.part_state import part_states
from instruments.simulated.board import Board
from instruments.simulated.hookup import Hookup, around, terminals

Floats = NDArray[np.float64]

STEP_A, STEP_SHARE, STEP_K = 1e-6, 1e-3, 0.1


@dataclass(frozen=True)
class Moment:
    """One solved operating point and how its quantities move with current and temperature."""

    hookup: Hookup
    amps: float
    junction_C: float
    values: Mapping[str, float]
    by_amp: Mapping[str, float]
    by_kelvin: Mapping[str, float]

    def at(self, name: str, amps: float, junction_C: float) -> float:
        """A quantity near this point, to first order."""
        return (
            self.values[name]
            + self.by_amp[name] * (amps - self.amps)
            + self.by_kelvin[name] * (junction_C - self.junction_C)
        )


class PortCircuit:
    """Solves one board's circuit, again and again, from where it was."""

    def __init__(self, board: Board) -> None:
        self._board = board
        self._last: Hookup | None = None
        self._volts: dict[str, float] = {}

    def at(
        self, hookup: Hookup, amps: float, junction_C: float, *, passing: bool = False
    ) -> Moment:
        """Solve at the load's current, a little more, and a little warmer, in one batch.

        passing: nothing later begins from here, so that it does not matter how often one looked.
        """
        step_A = max(STEP_SHARE * amps, STEP_A)
        junction = np.array([junction_C, junction_C, junction_C + STEP_K])
        elements = self._board.elements(junction)
        ports = self._board.stage.ports
        outside = around(hookup, ports, np.array([amps, amps + step_A, amps]))
        solution = self._solved(network([*elements, *outside]), hookup)
        if not passing:
            self._last = hookup
            self._volts = {name: float(volts[0]) for name, volts in solution.volts.items()}
        found = {**terminals(hookup, ports, solution), **self._inside(elements, solution)}
        return Moment(
            hookup,
            amps,
            junction_C,
            {name: float(v[0]) for name, v in found.items()},
            {name: float(v[1] - v[0]) / step_A for name, v in found.items()},
            {name: float(v[2] - v[0]) / STEP_K for name, v in found.items()},
        )

    def disturbed(self) -> None:
        """The board is not what it was: it goes its own way from where it is."""
        self._last = None

    def _solved(self, circuit: Network, hookup: Hookup) -> Solution:
        """Near the last point when only the load moved, or while the output runs down. As the
        circuit itself would go from there when a source was switched, set or connected
        otherwise: a stage may have several operating points."""
        near = self._last is not None and self._last.same_switches(hookup)
        solution = solve(circuit, 3, start=self._volts, follow=not near)
        if not solution.settled.all():
            solution = solve(circuit, 3, start=self._volts, follow=near)
        if not solution.settled.all():
            raise ArithmeticError("the simulated circuit has no operating point")
        return solution

    def _inside(self, elements: list[Element], solution: Solution) -> dict[str, Floats]:
        """What the main part stands, and what flows through fuses that are whole."""
        board, volts = self._board, solution.volts
        state = part_states(elements, board.stage.main, board.main_nodes, volts)
        quantities = {"loss": state.power_W, "part_current": state.current_A}
        for reference in board.wear.fuses:
            if reference in solution.currents:
                quantities[f"through:{reference}"] = solution.currents[reference]
        if board.stage.gate_nodes is not None:
            quantities["gate_voltage"] = solution.between(*board.stage.gate_nodes)
        return quantities
