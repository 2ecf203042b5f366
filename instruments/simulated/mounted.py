"""A board in the fixture: its circuit, its warmth and its wear, from its insertion on."""

from __future__ import annotations

import math
from typing import NamedTuple

from instruments.simulated.board import Board
from instruments.simulated.circuit import Moment, PortCircuit
from instruments.simulated.hookup import Hookup

LAWS_END_C = 250.0
"""The laws of the parts are not valid beyond."""
NEAR_K = 2.0
"""A solved point serves, to first order, for junctions so much warmer or cooler."""
FLOWS_A = 1e-6
STEEP = 0.1
"""Below this share of the current that still flows, the point that the load is going to says
nothing of where it is: a junction's slope rises without end towards no current."""


class State(NamedTuple):
    """A point near a solved one. hot_C: the junction, where laws end before."""

    moment: Moment
    amps: float
    junction_C: float
    hot_C: float

    def value(self, name: str) -> float:
        """A quantity by name; KeyError for one that the circuit does not have."""
        return self.moment.at(name, self.amps, self.junction_C)


class Mounted:
    """Asked with what is at the ports now; remembers the last point that it solved."""

    def __init__(self, board: Board) -> None:
        self.board = board
        self.age_s = 0.0
        self._circuit = PortCircuit(board)
        self._moment: Moment | None = None

    @property
    def ambient_C(self) -> float:
        """Around it: it drifts."""
        swing = math.sin(self.age_s / 290.0 + self.board.ambient_phase)
        return self.board.ambient_C + self.board.ambient_swing_K * swing

    @property
    def junction_C(self) -> float:
        """Of the main part; laws may not go so far, see LAWS_END_C."""
        heat = self.board.heat
        return self.ambient_C + (heat.case_K + heat.junction_K)

    def state(
        self, hookup: Hookup, target_A: float, amps: float, *, looked_at: bool = False
    ) -> State:
        """What holds now, at the load's current; the point is solved at the one that the load is
        going to, for on the way there the straight line serves, save where somebody looks."""
        hot, moment = self.junction_C, self._moment
        junction = min(hot, LAWS_END_C)
        if looked_at and amps > FLOWS_A and target_A < STEEP * amps:
            passing = self._circuit.at(hookup, amps, junction, passing=True)
            return State(passing, amps, junction, hot)
        if moment is None or moment.hookup != hookup or abs(junction - moment.junction_C) > NEAR_K:
            moment = self._moment = self._circuit.at(hookup, target_A, junction)
        return State(moment, amps, junction, hot)

    def currents(self, state: State) -> tuple[dict[str, float], float]:
        """Through its fuses that are whole, by reference, and through its main part."""
        wear = self.board.wear
        fuses = {
            name: 0.0 if fuse.is_open else state.value(f"through:{name}")
            for name, fuse in wear.fuses.items()
        }
        return fuses, state.value("part_current")

    def wear(self, seconds: float, state: State) -> None:
        """Let the currents of a state flow for a while."""
        wear = self.board.wear
        currents = self.currents(state) if wear.spends else ({}, 0.0)
        if wear.pass_time(seconds, *currents, state.hot_C):
            self._moment = None
            self._circuit.disturbed()

    def refit(self, reference: str) -> None:
        """Put a new fuse in; ValueError for a part that is none, or that nobody can take out."""
        fuses = self.board.wear.fuses
        if reference not in fuses:
            raise ValueError(f"{reference} is no fuse of this board that could be replaced")
        fuses[reference].renew()
        self._moment = None
        self._circuit.disturbed()

    def truth(self, name: str, hookup: Hookup) -> float | None:
        """A true value that is no quantity of the circuit, or None: see ``Plant.truth``."""
        what, _, at = name.partition("@")
        board = self.board
        if what == "drop" and at:
            junction = min(self.junction_C, LAWS_END_C)
            return self._circuit.at(hookup, float(at), junction).values["drop"]
        if what == "thermal_resistance":
            return board.heat.final_case_K(float(at)) / float(at)
        if what == "case_K":
            return board.heat.case_K
        if what == "junction_C":
            return min(self.junction_C, LAWS_END_C)
        if what == "part_dead":
            return float(board.wear.part.dead)
        if what.startswith("fuse_") and board.wear.fuses:
            what, _, reference = what.partition(":")
            fuse = board.wear.fuses[reference or next(iter(board.wear.fuses))]
            return {
                "fuse_open": float(fuse.is_open), "fuse_cleared_s": fuse.cleared_s,
                "fuse_A2s": fuse.onset_A2s,
            }[what]  # fmt: skip
        return None
