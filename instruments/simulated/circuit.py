"""The circuit of one moment: a board, what is at its ports, and what that holds.

The shunt is in the exposed plus lead, whatever is connected there and whichever way round; the
supply brings its own lead along. Quantities are those of the terminals: the supply's own are
positive as it sees them, the exposed ones negative where its leads are crossed.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import Emf, Network, Resistor, Solution, network, solve
from benchkit.circuit.network import Element
from benchkit.harness import Harness
from benchkit.prediction.part_state import part_states
from instruments.simulated.board import Board
from instruments.simulated.terminals import SUPPLY_OHM, LoadInput, SupplyOutput

Floats = NDArray[np.float64]

OFF_OHM = 50.0
"""What discharges the output of a supply that is off."""
METER_OHM = 1e7
"""Across a port with nothing connected to it."""
STEP_A, STEP_SHARE, STEP_K = 1e-6, 1e-3, 0.1


@dataclass(frozen=True)
class Hookup:
    """Who is at which port, and what supply and load hold."""

    harness: Harness
    emf_V: float
    limit_A: float
    on: bool
    load_mode: str
    load_value: float
    drawing: bool
    shunt_ohm: float
    lead_ohm: float
    load_conducts_back: bool
    bleeder_ohm: float | None = None
    """Across the guarded port, where there is one."""

    @property
    def regulates(self) -> bool:
        """Whether the supply's regulator works; its output is discharged otherwise."""
        return self.on and self.emf_V > 0

    @property
    def supply_ohm(self) -> float:
        """From the supply's terminals to the port."""
        return self.lead_ohm + (self.shunt_ohm if self.harness.exposed == "supply" else 0.0)


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

    def at(self, hookup: Hookup, amps: float, junction_C: float) -> Moment:
        """Solve at the load's current, a little more, and a little warmer, in one batch."""
        step_A = max(STEP_SHARE * amps, STEP_A)
        junction = np.array([junction_C, junction_C, junction_C + STEP_K])
        elements = self._board.elements(junction)
        around = self._around(hookup, np.array([amps, amps + step_A, amps]))
        solution = self._solved(network([*elements, *around]), hookup)
        self._last = hookup
        self._volts = {name: float(volts[0]) for name, volts in solution.volts.items()}
        found = self._quantities(hookup, elements, solution)
        return Moment(
            hookup,
            amps,
            junction_C,
            {name: float(v[0]) for name, v in found.items()},
            {name: float(v[1] - v[0]) / step_A for name, v in found.items()},
            {name: float(v[2] - v[0]) / STEP_K for name, v in found.items()},
        )

    def _around(self, hookup: Hookup, amps: Floats) -> list[Element]:
        """Supply and load at the board's terminals."""
        ports, harness = self._board.stage.ports, hookup.harness
        exposed = (ports.exposed_plus, ports.exposed_minus)
        guarded = (ports.guarded_plus, ports.guarded_minus)
        elements: list[Element] = []
        for port, nodes, who in (
            ("exposed", exposed, harness.exposed), ("guarded", guarded, harness.guarded),
        ):  # fmt: skip
            if who == "load" and port == "exposed":
                elements.append(Resistor("shunt", (nodes[0], "shunt"), hookup.shunt_ohm))
                nodes = ("shunt", nodes[1])  # noqa: PLW2901
            if harness.crossed and port == "exposed":
                nodes = nodes[::-1]  # noqa: PLW2901
            if who == "supply":
                elements.append(_supply(hookup, nodes))
            elif who == "load":
                elements.append(_load(hookup, nodes, amps))
            else:
                elements.append(Resistor(f"{port}.meter", nodes, METER_OHM))
        if hookup.bleeder_ohm is not None:
            elements.append(Resistor("bleeder", guarded, hookup.bleeder_ohm))
        return elements

    def _solved(self, circuit: Network, hookup: Hookup) -> Solution:
        """Near the last point when only the load moved, or while the output runs down. As the
        circuit itself would go from there when the supply was switched, set or connected
        otherwise: a stage may have several operating points."""
        last = self._last
        near = (
            last is not None
            and (last.harness, last.on) == (hookup.harness, hookup.on)
            and (not hookup.on or last.emf_V == hookup.emf_V)
        )
        solution = solve(circuit, 3, start=self._volts, follow=not near)
        if not solution.settled.all():
            solution = solve(circuit, 3, start=self._volts, follow=near)
        if not solution.settled.all():
            raise ArithmeticError("the simulated circuit has no operating point")
        return solution

    def _quantities(
        self, hookup: Hookup, elements: list[Element], solution: Solution
    ) -> dict[str, Floats]:
        board, harness, none = self._board, hookup.harness, np.zeros(3)
        ports, volts = board.stage.ports, solution.volts
        exposed = volts[ports.exposed_plus] - volts[ports.exposed_minus]
        guarded = volts[ports.guarded_plus] - volts[ports.guarded_minus]
        given = -solution.currents.get("supply", none)
        drawn = solution.currents.get("load", none)
        wired = "supply" in (harness.exposed, harness.guarded)
        at_supply = harness.sign * exposed if harness.exposed == "supply" else guarded
        into = {"supply": harness.sign * given, "load": -harness.sign * drawn, "nothing": none}
        at_load = none
        if harness.guarded == "load":
            at_load = guarded
        elif harness.exposed == "load":
            at_load = harness.sign * exposed - hookup.shunt_ohm * drawn
        quantities = {
            "supply_voltage": at_supply + hookup.supply_ohm * given
            if wired
            else np.full(3, hookup.emf_V),
            "supply_current": given,
            "load_voltage": at_load,
            "load_current": drawn,
            "exposed_voltage": exposed,
            "exposed_current": into[harness.exposed],
            "guarded_voltage": guarded,
            "drop": exposed - guarded,
            "loss": part_states(elements, board.stage.main, board.main_nodes, volts).power_W,
        }
        if board.stage.gate_nodes is not None:
            quantities["gate_voltage"] = solution.between(*board.stage.gate_nodes)
        return quantities


def _supply(hookup: Hookup, nodes: tuple[str, str]) -> Element:
    """Plus first."""
    if hookup.regulates:
        ohms = SUPPLY_OHM + hookup.supply_ohm
        return SupplyOutput("supply", nodes, hookup.emf_V, hookup.limit_A, ohms)
    return Emf("supply", nodes, hookup.emf_V, OFF_OHM + hookup.supply_ohm)


def _load(hookup: Hookup, nodes: tuple[str, str], amps: Floats) -> Element:
    """Plus first."""
    back = hookup.load_conducts_back
    if hookup.drawing and hookup.load_mode != "CURR":
        return LoadInput("load", nodes, hookup.load_mode, hookup.load_value, back)
    return LoadInput("load", nodes, "CURR", amps, back)
