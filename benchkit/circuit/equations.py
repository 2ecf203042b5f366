"""Kirchhoff's current law at every free node of a network, for a whole batch at once.

Arrays run over the batch in their last axis, and what is structurally zero in the Jacobian is
never stored or computed with: a stage's network is small and sparse, so that the time goes into
the laws of its parts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.batch import Index, entries
from benchkit.circuit.elements import Channel
from benchkit.circuit.network import GROUND, Branch, Network

Floats = NDArray[np.float64]

SHUNT_S = 1e-12
"""Always present from every node to ground, so that a node cut off by off parts has a voltage."""
FLOOR_A = 1e-9
"""Where every branch carries less than this, residuals are compared with it instead."""
SMALL = 1e-3
"""Capacitance, as a share of the usual one."""
ROUNDING = 8 * float(np.finfo(float).eps)

Matrix = list[list[Floats | None]]
"""Rows of columns, each an array over the batch, or None where it is structurally zero."""


@dataclass(frozen=True)
class State:
    """Voltages of the free nodes, and Kirchhoff's law there.

    x, kirchhoff, floor: shape (nodes, batch). floor: what double precision cannot resolve, a few
    last bits of the voltages at an element times its conductances. share: the largest current left
    over at a node beyond its floor, as a share of the largest branch current, shape (batch,).
    """

    x: Floats
    kirchhoff: Floats
    jacobian: Matrix
    floor: Floats
    share: Floats

    def subset(self, index: Index) -> State:
        """The same for the entries ``index``."""
        return State(
            self.x[:, index], self.kirchhoff[:, index],
            [[None if v is None else v[index] for v in line] for line in self.jacobian],
            self.floor[:, index] if self.floor.shape[1] > 1 else self.floor, self.share[index],
        )  # fmt: skip

    def dense(self) -> Floats:
        """The Jacobian with its zeros, shape (batch, nodes, nodes)."""
        count, batch = self.x.shape
        whole = np.zeros((batch, count, count))
        for row, line in enumerate(self.jacobian):
            for column, value in enumerate(line):
                if value is not None:
                    whole[:, row, column] = value
        return whole


class Equations:
    """The equations of one network; ``subset`` gives those of some entries of the batch."""

    def __init__(self, circuit: Network, batch: int) -> None:
        names = circuit.node_names()
        self.batch = batch
        self.free = [name for name in names if name not in circuit.held]
        self.held = [name for name in names if name in circuit.held]
        rows = {name: row for row, name in enumerate(self.free + self.held)}
        rows[GROUND] = len(rows)
        self.elements = [(e, [rows[node] for node in e.nodes]) for e in circuit.elements]
        self.fixed = np.zeros((len(self.held) + 1, batch))
        for row, name in enumerate(self.held):
            self.fixed[row] = circuit.held[name]

    def subset(self, index: Index) -> Equations:
        """The same equations for the entries ``index``."""
        other = object.__new__(Equations)
        other.free, other.held = self.free, self.held
        other.fixed = self.fixed[:, index]
        other.batch = other.fixed.shape[1]
        other.elements = [(entries(e, index), rows) for e, rows in self.elements]
        return other

    def capacity(self) -> Floats:
        """Relative capacitances of the transient, shape (nodes, nodes), symmetric.

        The same from every node to ground, save that a gate hangs on its source: a MOSFET's gate
        follows a source that jumps, and does not turn its channel on by staying behind. It keeps
        SMALL to ground, as do nodes inside a part (``Q1.drain``).
        """
        count = len(self.free)
        farads = np.diag([SMALL if "." in name else 1.0 for name in self.free])
        for element, rows in self.elements:
            if isinstance(element, Channel) and rows[1] < count:
                gate, source = rows[1], rows[2]
                farads[gate, gate] += SMALL if farads[gate, gate] == 1.0 else 1.0
                if source < count:
                    farads[source, source] += 1
                    farads[gate, source] -= 1
                    farads[source, gate] -= 1
        return farads

    def padded(self, x: Floats) -> Floats:
        """Voltages of free nodes, held nodes and ground, in that order."""
        return np.concatenate([x, self.fixed])

    def at(self, x: Floats, *, rough: bool = False) -> State:
        """Residuals and Jacobian at the free nodes, and how good they are.

        rough: without the floor, as if double precision resolved everything, which is quicker.
        """
        count, batch = x.shape
        volts = self.padded(x)
        left = SHUNT_S * x
        jacobian: Matrix = [[None] * count for _ in range(count)]
        for row in range(count):
            jacobian[row][row] = np.full(batch, SHUNT_S)
        largest = np.full(batch, FLOOR_A)
        stamped: list[tuple[Branch, list[int]]] = []
        for element, rows in self.elements:
            for branch in element.branches(volts[rows]):
                stamped.append((branch, rows))
                first, second, amps, slopes, _ = branch
                a, b = rows[first], rows[second]
                np.maximum(largest, np.abs(amps), out=largest)
                if a < count:
                    left[a] += amps
                if b < count:
                    left[b] -= amps
                for plus, minus, slope in slopes:
                    c, d = rows[plus], rows[minus]
                    _stamp(jacobian, count, a, b, c, d, slope)
        if rough:
            worst = np.abs(left).max(axis=0, initial=0.0)
            return State(x, left, jacobian, np.zeros((count, 1)), worst / largest)
        floor = self._floor(volts, stamped)
        worst = (np.abs(left) - floor).max(axis=0, initial=0.0)
        return State(x, left, jacobian, floor, worst / largest)

    def _floor(self, volts: Floats, stamped: list[tuple[Branch, list[int]]]) -> Floats:
        """What the last bits of the voltages at an element are worth in its currents."""
        height = np.abs(volts)
        floor = np.zeros(volts.shape)
        for (first, second, _, slopes, inner_V), rows in stamped:
            if not slopes:
                continue
            highest = height[rows[0]] + inner_V
            for row in rows[1:]:
                highest = np.maximum(highest, height[row])
            worth = np.abs(slopes[0][2])
            for _, _, slope in slopes[1:]:
                worth = worth + np.abs(slope)
            worth = worth * highest
            floor[rows[first]] += worth
            floor[rows[second]] += worth
        return ROUNDING * floor[: len(self.free)]


def _stamp(jacobian: Matrix, count: int, a: int, b: int, c: int, d: int, slope: Floats) -> None:
    """A current from node a to node b, controlled by the voltage from c to d."""
    if a == b or c == d:
        return
    for row, outward in ((a, 1), (b, -1)):
        if row >= count:
            continue
        line = jacobian[row]
        for column, sign in ((c, outward), (d, -outward)):
            if column >= count:
                continue
            value = line[column]
            if value is None:
                shape = line[row]
                assert shape is not None
                line[column] = value = np.zeros(shape.shape)
            if sign > 0:
                value += slope
            else:
                value -= slope


def newton_step(state: State, damping: float = 0.0) -> Floats:
    """Solve J step = -kirchhoff for the whole batch, shape (nodes, batch), by elimination.

    Pivots are taken down the diagonal: with a conductance to ground at every node that is sound
    for most networks at most points. Where it is not, the step is poor or not finite, and the
    caller notices. A few last bits are added to the diagonal, which is singular in double
    precision where a large conductance ties two nodes together and nothing else holds them.
    """
    rows = [list(line) for line in state.jacobian]
    right = list(-state.kirchhoff)
    count = len(rows)
    for k in range(count):
        pivot = rows[k][k]
        assert pivot is not None
        pivot = pivot + (ROUNDING * np.abs(pivot) + damping)
        rows[k][k] = pivot
        for i in range(k + 1, count):
            below = rows[i][k]
            if below is None:
                continue
            factor = below / pivot
            for j in range(k + 1, count):
                beside = rows[k][j]
                if beside is not None:
                    own = rows[i][j]
                    taken = factor * beside
                    rows[i][j] = -taken if own is None else own - taken
            right[i] = right[i] - factor * right[k]
    for k in reversed(range(count)):
        for j in range(k + 1, count):
            beside = rows[k][j]
            if beside is not None:
                right[k] = right[k] - beside * right[j]
        right[k] = right[k] / rows[k][k]
    return np.stack(right) if right else np.zeros_like(state.x)
