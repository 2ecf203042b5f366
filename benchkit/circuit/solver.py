"""The node voltages of a network, batched: Newton's method, and a transient where it fails.

One call solves the same network for many sets of parameters at once (currents, supply voltages,
temperatures, tolerance samples), each an entry of the batch. Entries that a few Newton steps do
not settle are followed from where they began as the circuit itself would move: with a capacitor
from every node to ground (from a gate to its source), in implicit Euler steps that grow as long as
they go as foreseen
(pseudo-transient continuation; Kelley and Keyes, "Convergence analysis of pseudo-transient
continuation", SIAM J. Numer. Anal. 35, 1998). So two current sources that disagree, a supply in
its limit against a load, drive the voltage to the corner where one of them gives way, and a
network with several operating points ends in the one it would reach. A circuit that swings never
ends there: its operating point is found by ``homotopy``, as a third resort, and is then one at
which it would not rest. Where there is none, ``no_point`` says why. Kirchhoff residuals are always
returned: the caller sees how well every entry was solved, and none is passed over in
silence.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.equations import ROUNDING, Equations, State, newton_step
from benchkit.circuit.homotopy import traced
from benchkit.circuit.network import GROUND, Network, terminal_currents

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

TOLERANCE = 1e-9
"""Largest residual current of a settled entry, as a share of its largest branch current."""
AIM = 1e-3 * TOLERANCE
"""Where the iteration stops: Newton's last steps are cheap."""
STEP_V = 5.0
"""Longest Newton step of a node, and about the longest first step of a transient."""
PLAIN, TRANSIENT = 16, 300
"""Most iterations of each kind."""
PATIENCE, HOPELESS = 8, 0.1
"""Newton steps after which an iteration whose every residual share is above this is given up."""
FIRST_GO = 5
"""Newton steps of every chunk before those that are not settled are gathered from all of them."""
ROUGH = 4
"""Newton steps before it is looked at what double precision can resolve."""
FORESEEN, AIMED = 0.5, 0.25
"""A transient step stands where the correction that it calls for is at most this share of it, and
the next one is made as long as should leave AIMED."""
GROWTH, SHRINKAGE = 10.0, 20.0
"""Bounds of the change from one step to the next."""
CHUNK = 8192
"""Entries solved at a time: enough that a numpy call's overhead is small, and few enough that their
arrays nearly fit a processor's cache and memory stays bounded."""
FARTHEST_V, LOST_V = 1e4, 1e6
"""No operating point is beyond the first: there a current source drives a current that nothing
carries. A transient, which may sling a node out and back, is not followed beyond the second."""
COMPACT = 0.25
"""What is settled is set aside once it is this share of the batch."""


@dataclass(frozen=True)
class Solution:
    """Node voltages and what is known of their quality; every array has shape (batch,).

    residual is the largest current that Kirchhoff's law leaves over at any free node, as a share
    of the largest branch current (``equations.State.share``). settled: residual <= TOLERANCE, with
    every voltage below FARTHEST_V; ``no_point.reason`` says why an entry is not. iterations: the
    most that any entry took.
    """

    circuit: Network
    volts: dict[str, Floats]
    residual: Floats
    settled: Flags
    iterations: int

    def between(self, first: str, second: str) -> Floats:
        """Voltage of the first node against the second."""
        return self.volts[first] - self.volts[second]

    @cached_property
    def currents(self) -> dict[str, Floats]:
        """Each element's current into its first terminal, amperes."""
        return {e.name: terminal_currents(e, self.volts)[0] for e in self.circuit.elements}


def solve(
    circuit: Network,
    batch: int,
    start: Mapping[str, Floats | float] | None = None,
    *,
    follow: bool = False,
) -> Solution:
    """Find the operating point of every entry of the batch.

    ``start`` gives node voltages to begin from (missing nodes begin at 0 V): the state just
    before. ``follow`` goes the circuit's own way from there, for a network that may have several
    operating points; without it plain Newton steps come first, which are quicker.
    """
    equations = Equations(circuit, batch)
    x = np.zeros((len(equations.free), batch))
    for row, name in enumerate(equations.free):
        if start and name in start:
            x[row] = start[name]
    begun, share = x.copy(), np.full(batch, np.inf)
    iterations, rest = 0, np.arange(batch)
    if batch > CHUNK and not follow:
        # The last few entries of every chunk would be slow alone: they are left for the second go.
        for low in range(0, batch, CHUNK):
            part = slice(low, low + CHUNK)
            x[:, part], share[part], iterations = _newton(
                equations.subset(part), begun[:, part], FIRST_GO
            )
        rest = np.flatnonzero(~(share <= AIM))
    for low in range(0, rest.size, CHUNK):
        some = rest[low : low + CHUNK]
        these = equations if some.size == batch else equations.subset(some)
        x[:, some], share[some], steps = _settle(these, x[:, some], begun[:, some], follow=follow)
        iterations = max(iterations, steps)
    volts = dict(zip((*equations.free, *equations.held, GROUND), equations.padded(x), strict=True))
    settled = (share <= TOLERANCE) & (np.abs(x).max(axis=0, initial=0.0) < FARTHEST_V)
    return Solution(circuit, volts, share, settled, iterations)


def _settle(
    equations: Equations, near: Floats, start: Floats, *, follow: bool
) -> tuple[Floats, Floats, int]:
    """Node voltages, residuals and iterations of one chunk.

    Newton's method begins at ``near``, every other way at ``start``.
    """
    if follow:
        x, share, iterations = _transient(equations, equations.at(start))
    else:
        x, share, iterations = _newton(equations, near, PLAIN)
        rest = np.flatnonzero(~(share <= TOLERANCE))
        if rest.size:
            some = equations.subset(rest)
            x[:, rest], share[rest], more = _transient(some, some.at(start[:, rest]))
            iterations += more
    within = np.abs(x).max(axis=0, initial=0.0) < FARTHEST_V
    rest = np.flatnonzero(~(share <= TOLERANCE) & within)
    if rest.size:
        some = equations.subset(rest)
        found, good, more = _newton(some, traced(some, start[:, rest], FARTHEST_V), PLAIN)
        kept = good <= TOLERANCE
        x[:, rest[kept]], share[rest[kept]] = found[:, kept], good[kept]
        iterations += more
    return x, share, iterations


def _newton(equations: Equations, start: Floats, most: int) -> tuple[Floats, Floats, int]:
    """Newton's method in plain steps, clipped node by node: the quickest where laws are smooth.

    Overshoot is welcome where a junction turns on.
    """
    x, share = start.copy(), np.empty(start.shape[1])
    places = np.arange(start.shape[1])
    state = equations.at(start, rough=True)
    done = state.share <= AIM
    iteration = 0
    while iteration < most and not done.all():
        if iteration == PATIENCE and (state.share[~done] > HOPELESS).all():
            break
        if done.mean() >= COMPACT:
            x[:, places], share[places] = state.x, state.share
            kept = np.flatnonzero(~done)
            places, done = places[kept], done[kept]
            equations, state = equations.subset(kept), state.subset(kept)
        with np.errstate(all="ignore"):
            step = np.clip(newton_step(state), -STEP_V, STEP_V)
            if not np.isfinite(step.sum()):
                step = np.nan_to_num(step)
        step[:, done] = 0.0
        new = equations.at(state.x + step, rough=iteration < ROUGH)
        # What is settled and improves no more is at the end of double precision.
        worse = (new.share >= state.share) & (state.share <= TOLERANCE) & ~done
        if worse.any():
            new.x[:, worse], new.share[worse] = state.x[:, worse], state.share[worse]
        done = done | worse | (new.share <= AIM)
        state = new
        iteration += 1
    x[:, places], share[places] = state.x, state.share
    return x, share, iteration


def _transient(equations: Equations, state: State) -> tuple[Floats, Floats, int]:
    """Follow every entry until it is settled, or until time is up.

    An implicit Euler step of length h with a capacitance C solves f(x + d) + (C/h) d = 0; here one
    Newton step of it is taken. The next Newton step of it, with the same Jacobian, is compared with
    the first: a measure that does not mix microamperes with amperes, as the residual would
    (Deuflhard, "Newton Methods for Nonlinear Problems", 2004: natural monotonicity test). It tells
    whether the step was too long, and how long the next one may be.
    """
    ends, left = state.x.T.copy(), state.share.copy()
    places = np.arange(left.size)
    x, kirchhoff, jacobian, share = state.x.T, state.kirchhoff.T, state.dense(), state.share
    damping = _largest(kirchhoff) / STEP_V
    moving = share > AIM
    iterations, capacity = 0, equations.capacity()
    while moving.any() and iterations < TRANSIENT:
        if moving.mean() <= 1 - COMPACT:
            ends[places], left[places] = x, share
            kept = np.flatnonzero(moving)
            equations, places, moving = equations.subset(kept), places[kept], moving[kept]
            x, kirchhoff, jacobian = x[kept], kirchhoff[kept], jacobian[kept]
            share, damping = share[kept], damping[kept]
        iterations += 1
        held = _held(jacobian, damping, capacity)
        inverse = np.asarray(np.linalg.inv(held), dtype=float)
        step = _times(inverse, -kirchhoff)
        new = equations.at((x + step * moving[:, None]).T)
        again = _times(inverse, -new.kirchhoff.T - damping[:, None] * (step @ capacity))
        length = np.maximum(_largest(step), 1e-30)
        # What the last bits of the voltages may call for is no miss.
        bits = ROUNDING * np.abs(x) + _times(np.abs(inverse), new.floor.T)
        missed = np.maximum(np.abs(again) - bits, 0.0).max(axis=1) / length
        stands = missed <= FORESEEN
        wanted = np.nan_to_num(np.sqrt(AIMED / np.maximum(missed, 1e-12)))
        # Where the circuit's own conductances are larger than the damping, it takes more than
        # SHRINKAGE times the damping to shorten the step.
        least = np.nan_to_num(np.where(stands, 0.0, _largest(kirchhoff) / length))
        damping = np.maximum(damping, least) / np.clip(
            wanted, np.where(stands, 1.0, 1 / SHRINKAGE), GROWTH
        )
        improved = moving & stands
        moving &= stands | ~(share <= TOLERANCE)
        x = np.where(improved[:, None], new.x.T, x)
        kirchhoff = np.where(improved[:, None], new.kirchhoff.T, kirchhoff)
        jacobian = np.where(improved[:, None, None], new.dense(), jacobian)
        share = np.where(improved, new.share, share)
        moving &= (share > AIM) & (_largest(x) < LOST_V)
    ends[places], left[places] = x, share
    return ends.T.copy(), left, iterations


def _held(jacobian: Floats, damping: Floats, capacity: Floats) -> Floats:
    """The Jacobian with what the capacitances add (and see ``equations.newton_step``)."""
    nodes = range(jacobian.shape[1])
    held = jacobian + damping[:, None, None] * capacity
    held[:, nodes, nodes] += ROUNDING * np.abs(jacobian[:, nodes, nodes])
    return held


def _times(matrix: Floats, vector: Floats) -> Floats:
    product: Floats = (matrix @ vector[:, :, None])[:, :, 0]
    return product


def _largest(values: Floats) -> Floats:
    largest: Floats = np.abs(values).max(axis=1, initial=0.0)
    return largest
