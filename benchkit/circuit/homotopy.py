"""The last resort of the solver: a path that leads to an operating point wherever it turns.

Every node is tied by a conductance g to the voltage a that it began at, F(x) + g (x - a) = 0. With
g large the solution is x = a; with g = 0 it is the network's own. The curve of solutions between
is followed by its arc length, in x and in s = -ln g, so that it may turn back on the way, as it
does where a circuit has hysteresis or swings without end (fixed-point homotopy; Melville,
Trajkovic, Fang and Watson, "Artificial parameter homotopy methods for the DC operating point
problem", IEEE Trans. CAD 12, 1993). Where it ends need not be a point at which the circuit rests.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.equations import SHUNT_S, Equations

Floats = NDArray[np.float64]

BEGUN_V = 0.01
"""How far the first point is from the voltages that it is tied to."""
LONGEST, SHORTEST, FIRST = 4.0, 1e-9, 0.25
"""Steps along the curve; a volt is as long as a neper of g."""
STEPS, CORRECTIONS = 3000, 6
CLOSE = 1e-6
"""A corrected point is on the curve when it moves by less than this, in volts and nepers."""
CORNER = 1e-3
"""Steps shorter than this may turn by any angle."""
QUICK = 3
"""Corrections after which the next step is longer."""


def traced(equations: Equations, start: Floats, farthest_V: float) -> Floats:
    """Node voltages at the end of every entry's curve, near an operating point.

    start: shape (nodes, batch). An entry whose curve leads beyond ``farthest_V``, or which takes
    more than STEPS steps, is returned where it stopped.
    """
    origin = start.T.copy()
    batch, nodes = origin.shape
    outflow = np.abs(equations.at(start).kirchhoff).max(axis=0, initial=0.0)
    point = np.hstack([origin, -np.log(outflow / BEGUN_V + SHUNT_S)[:, None]])
    along = np.zeros((batch, nodes + 1))
    along[:, -1] = 1.0
    length = np.full(batch, FIRST)
    end = -np.log(0.01 * SHUNT_S)
    places = np.arange(batch)
    for _ in range(STEPS):
        if not places.size:
            break
        some = equations.subset(places)
        guess = point[places] + length[places, None] * along[places]
        met, taken, new, tangent = _corrected(
            some, origin[places], point[places], guess, along[places]
        )
        point[places[met]], along[places[met]] = new[met], tangent[met]
        length[places] *= np.where(met, np.where(taken <= QUICK, 2.0, 1.0), 0.25)
        np.minimum(length, LONGEST, out=length)
        on = (
            (point[places, -1] < end)
            & (length[places] > SHORTEST)
            & (np.abs(point[places, :-1]).max(axis=1, initial=0.0) < farthest_V)
        )
        places = places[on]
    return point[:, :-1].T.copy()


def _corrected(
    equations: Equations, origin: Floats, begin: Floats, guess: Floats, along: Floats
) -> tuple[NDArray[np.bool_], NDArray[np.intp], Floats, Floats]:
    """Newton's method across the curve from a guess.

    Returns whether it is on the curve, corrections taken, point and tangent.
    """
    point = guess.copy()
    batch, wide = point.shape
    nodes = range(wide - 1)
    taken = np.full(batch, CORRECTIONS + 1)
    begun, tangent = np.zeros(batch), along
    for correction in range(1, CORRECTIONS + 1):
        tie = np.exp(-np.clip(point[:, -1], -100.0, 100.0))
        state = equations.at(point[:, :-1].T)
        away = point[:, :-1] - origin
        matrix = np.zeros((batch, wide, wide))
        matrix[:, :-1, :-1] = state.dense()
        matrix[:, nodes, nodes] += tie[:, None]
        matrix[:, :-1, -1] = -tie[:, None] * away
        right = np.zeros((batch, wide, 2))
        right[:, :-1, 0] = -(state.kirchhoff.T + tie[:, None] * away)
        scale = np.abs(matrix[:, :-1]).max(axis=2) + SHUNT_S
        matrix[:, :-1] /= scale[:, :, None]
        right[:, :-1, 0] /= scale
        matrix[:, -1], right[:, -1, 1] = along, 1.0
        both = _solution(matrix, right)
        moved = np.abs(both[:, :, 0]).max(axis=1)
        point = point + both[:, :, 0]
        tangent = both[:, :, 1]
        met = (moved < CLOSE * (1 + 1e-3 * np.abs(point).max(axis=1))) & (taken > CORRECTIONS)
        taken[met] = correction
        if correction == 1:
            begun = moved
        if (taken <= CORRECTIONS).all():
            break
    size = np.linalg.norm(tangent, axis=1, keepdims=True)
    tangent = tangent / np.where(size > 0, size, 1.0)
    fine = (taken <= CORRECTIONS) & np.isfinite(point).all(axis=1) & (begun < 2.0)
    # After a long step, a tangent that has turned sharply may be that of another branch of the
    # curve; after a short one it is a corner, where a law has one.
    step = np.linalg.norm(guess - begin, axis=1)
    fine &= ((tangent * along).sum(axis=1) > 0.5) | (step < CORNER)
    return fine, taken, point, tangent


def _solution(matrix: Floats, right: Floats) -> Floats:
    """Of every entry's equations; by least squares where they are singular."""
    matrix, right = np.nan_to_num(matrix), np.nan_to_num(right)
    try:
        return np.asarray(np.linalg.solve(matrix, right), dtype=float)
    except np.linalg.LinAlgError:
        every = [np.linalg.lstsq(a, b)[0] for a, b in zip(matrix, right, strict=True)]
        return np.asarray(every, dtype=float)
