"""The node voltages of a network, batched: Newton's method, and a transient where it fails.

One call solves the same network for many sets of parameters at once (currents, supply voltages,
temperatures, tolerance samples), each an entry of the batch. Entries that a few Newton steps do
not settle are followed from where they began as the circuit itself would move: with a capacitor
from every node to ground, in implicit Euler steps that grow as long as they go as foreseen
(pseudo-transient continuation; Kelley and Keyes, "Convergence analysis of pseudo-transient
continuation", SIAM J. Numer. Anal. 35, 1998). So two current sources that disagree, a supply in
its limit against a load, drive the voltage to the corner where one of them gives way, and a
network with several operating points ends in the one it would reach. Kirchhoff residuals are
always returned: the caller sees how well every entry was solved, and none is passed over in
silence.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.network import GROUND, Network

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

SHUNT_S = 1e-12
"""Always present from every node to ground, so that a node cut off by off parts has a voltage."""
TOLERANCE = 1e-9
"""Largest residual current of a settled entry, as a share of its largest branch current."""
AIM = 1e-3 * TOLERANCE
"""Where the iteration stops: Newton's last steps are cheap."""
FLOOR_A = 1e-9
"""Where every branch carries less than this, residuals are compared with it instead."""
STEP_V = 5.0
"""Longest Newton step of a node, and about the longest first step of a transient."""
PLAIN, TRANSIENT = 16, 300
"""Most iterations of each kind."""
FORESEEN, AIMED = 0.5, 0.25
"""A transient step stands where the correction that it calls for is at most this share of it, and
the next one is made as long as should leave AIMED."""
GROWTH, SHRINKAGE = 10.0, 20.0
"""Bounds of the change from one step to the next."""
ROUNDING = 8 * float(np.finfo(float).eps)


@dataclass(frozen=True)
class Solution:
    """Node voltages and what is known of their quality; every array has shape (batch,).

    residual is the largest current that Kirchhoff's law leaves over at any free node, as a share
    of the largest branch current. What double precision cannot resolve (a few last bits of a
    node's voltage times the conductance at it) is not counted. settled: residual <= TOLERANCE.
    """

    volts: dict[str, Floats]
    currents: dict[str, Floats]
    residual: Floats
    settled: Flags
    iterations: int

    def between(self, first: str, second: str) -> Floats:
        """Voltage of the first node against the second."""
        return self.volts[first] - self.volts[second]


@dataclass(frozen=True)
class _State:
    """Voltages of the free nodes, and Kirchhoff's law there.

    share is ``Solution.residual``.
    """

    x: Floats
    kirchhoff: Floats
    jacobian: Floats
    share: Floats

    def but(self, which: Flags, other: _State) -> _State:
        """This state, with the entries ``which`` taken from another."""
        one = which[:, None]
        return _State(
            np.where(one, other.x, self.x), np.where(one, other.kirchhoff, self.kirchhoff),
            np.where(one[:, :, None], other.jacobian, self.jacobian),
            np.where(which, other.share, self.share),
        )  # fmt: skip


class _Equations:
    """Kirchhoff's current law at every free node of a network, for a whole batch."""

    def __init__(self, circuit: Network, batch: int) -> None:
        names = circuit.node_names()
        self.free = [name for name in names if name not in circuit.held]
        self.held = [name for name in names if name in circuit.held]
        rows = {name: row for row, name in enumerate(self.free + self.held)}
        rows[GROUND] = len(rows)
        self.elements = [(e, [rows[node] for node in e.nodes]) for e in circuit.elements]
        self.fixed = np.zeros((batch, len(self.held) + 1))
        for column, name in enumerate(self.held):
            self.fixed[:, column] = circuit.held[name]

    def padded(self, x: Floats) -> Floats:
        """Voltages of free nodes, held nodes and ground, in that order."""
        return np.concatenate([x, self.fixed], axis=1)

    def at(self, x: Floats) -> _State:
        """Residuals and Jacobian at the free nodes, and how good they are."""
        batch, count = x.shape
        volts = self.padded(x)
        kirchhoff = SHUNT_S * x
        jacobian = np.zeros((batch, count, count))
        jacobian[:, range(count), range(count)] = SHUNT_S
        largest = np.full(batch, FLOOR_A)
        floor = np.zeros((batch, count))
        for element, rows in self.elements:
            at = volts[:, rows]
            currents, slopes = element.currents(at)
            np.maximum(largest, np.abs(currents).max(axis=1), out=largest)
            for a, row in enumerate(rows):
                if row >= count:
                    continue
                kirchhoff[:, row] += currents[:, a]
                floor[:, row] += (np.abs(slopes[:, a, :]) * np.abs(at)).sum(axis=1)
                for b, column in enumerate(rows):
                    if column < count:
                        jacobian[:, row, column] += slopes[:, a, b]
        beyond = np.maximum(np.abs(kirchhoff) - ROUNDING * floor, 0.0)
        return _State(x, kirchhoff, jacobian, beyond.max(axis=1, initial=0.0) / largest)


def solve(
    circuit: Network, batch: int, start: Mapping[str, Floats | float] | None = None
) -> Solution:
    """Find the operating point of every entry of the batch.

    ``start`` gives node voltages to begin from (missing nodes begin at 0 V): the state just
    before, so that a network with several operating points is followed to the one it would reach.
    ``Solution.currents`` holds each element's current into its first terminal, in amperes.
    """
    equations = _Equations(circuit, batch)
    x = np.zeros((batch, len(equations.free)))
    for column, name in enumerate(equations.free):
        if start and name in start:
            x[:, column] = start[name]
    begun = equations.at(x)
    state, iterations = _newton(equations, begun)
    settled = state.share <= TOLERANCE
    if not settled.all():
        state, more = _transient(equations, state.but(~settled, begun))
        iterations += more
    volts = equations.padded(state.x)
    names = [*equations.free, *equations.held, GROUND]
    first = {e.name: e.currents(volts[:, rows])[0][:, 0] for e, rows in equations.elements}
    return Solution(
        {name: volts[:, row] for row, name in enumerate(names)},
        first, state.share, state.share <= TOLERANCE, iterations,
    )  # fmt: skip


def _newton(equations: _Equations, state: _State) -> tuple[_State, int]:
    """Newton's method in plain steps, clipped node by node: the quickest where laws are smooth.

    Overshoot is welcome where a junction turns on.
    """
    for iteration in range(PLAIN):
        moving = state.share > AIM
        if not moving.any():
            return state, iteration
        step = np.linalg.solve(_held(state.jacobian, 0.0), -state.kirchhoff[:, :, None])[:, :, 0]
        new = equations.at(state.x + np.clip(step, -STEP_V, STEP_V) * moving[:, None])
        # What is settled and improves no more is at the end of double precision.
        if (~moving | ((new.share >= state.share) & (state.share <= TOLERANCE))).all():
            return state, iteration + 1
        state = new
    return state, PLAIN


def _transient(equations: _Equations, state: _State) -> tuple[_State, int]:
    """Follow every entry that is not settled until it is, or until time is up.

    An implicit Euler step of length h with a capacitance C solves f(x + d) + (C/h) d = 0; here one
    Newton step of it is taken. The next Newton step of it, with the same Jacobian, is compared with
    the first: a measure that does not mix microamperes with amperes, as the residual would
    (Deuflhard, "Newton Methods for Nonlinear Problems", 2004: natural monotonicity test). It tells
    whether the step was too long, and how long the next one may be.
    """
    damping = _largest(state.kirchhoff) / STEP_V
    moving = state.share > AIM
    for iteration in range(TRANSIENT):
        if not moving.any():
            return state, iteration
        inverse = np.linalg.inv(_held(state.jacobian, damping))
        step = _times(inverse, -state.kirchhoff)
        new = equations.at(state.x + step * moving[:, None])
        again = _times(inverse, -new.kirchhoff - damping[:, None] * step)
        length = np.maximum(_largest(step), 1e-30)
        missed = _largest(again) / length
        stands = missed <= FORESEEN
        wanted = np.sqrt(AIMED / np.maximum(missed, 1e-12))
        # Where the circuit's own conductances are larger than the damping, it takes more than
        # SHRINKAGE times the damping to shorten the step.
        least = np.where(stands, 0.0, _largest(state.kirchhoff) / length)
        damping = np.maximum(damping, least) / np.clip(
            wanted, np.where(stands, 1.0, 1 / SHRINKAGE), GROWTH
        )
        improved = moving & stands
        moving &= stands | ~(state.share <= TOLERANCE)
        state = state.but(improved, new)
        moving &= state.share > AIM
    return state, TRANSIENT


def _held(jacobian: Floats, damping: Floats | float) -> Floats:
    """The Jacobian with a conductance more at every node.

    A few last bits are added to the diagonal, which is singular in double precision where a large
    conductance ties two nodes together and nothing else holds them.
    """
    nodes = range(jacobian.shape[1])
    diagonal = jacobian[:, nodes, nodes]
    held = jacobian.copy()
    held[:, nodes, nodes] += ROUNDING * np.abs(diagonal) + np.reshape(damping, (-1, 1))
    return held


def _times(matrix: NDArray[np.floating[Any]], vector: Floats) -> Floats:
    product: Floats = (matrix @ vector[:, :, None])[:, :, 0]
    return product


def _largest(values: Floats) -> Floats:
    largest: Floats = np.abs(values).max(axis=1, initial=0.0)
    return largest
