"""The figures of a lot, board by board, against limit and datasheet band."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.verdict import rounded
from benchkit.reports.figures import BLUE, GREY, INK, ORANGE, PURPLE, SKY, STYLE, as_svg
from benchkit.reports.quantities import Quantity
from benchkit.reports.words import unit_of

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
NEAR = 1.5
"""A limit further off than this, in spans of boards and band, would squash both."""
ROW = 0.1
"""Height of a row of boards off the scale, in heights of the scale."""
LABELS = 6
"""More serials than this are not written into one panel: they would cover each other."""


def lot_figure(quantities: Sequence[Quantity], serials: Sequence[str]) -> str:
    """One panel a quantity, two side by side; "" when there is nothing to draw."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    drawn = [q for q in quantities if q.statistics.n]
    if not drawn:
        return ""
    with rc_context({**STYLE, "axes.titlesize": 7.6, "font.size": 7.4}):
        rows = math.ceil(len(drawn) / 2)
        tall = 1.8 * rows + 0.3
        figure = Figure(figsize=(7.2, tall))
        grid = figure.add_gridspec(
            rows, 2, hspace=0.3, wspace=0.18, left=0.07, right=0.99,
            bottom=0.38 / tall, top=1 - 0.24 / tall,
        )  # fmt: skip
        for number, quantity in enumerate(drawn):
            axes = figure.add_subplot(grid[number // 2, number % 2])
            _panel(axes, quantity, serials)
            axes.tick_params(labelbottom=number >= len(drawn) - 2)
        figure.supxlabel("board, in the order of the lot", fontsize=7.4, y=0.06 / tall)
        return as_svg(figure, "Every board against limits and datasheet band")


def _panel(axes: Any, quantity: Quantity, serials: Sequence[str]) -> None:
    place = np.arange(1, len(serials) + 1)
    values = np.array(quantity.values)
    U = np.array([0.0 if r is None or r.U is None else r.U for r in quantity.rows])
    promise = np.stack([_promise(quantity, key) for key in ("low", "nominal", "high")])
    _band(axes, promise)
    odd = np.isin(place - 1, list(quantity.odd))
    missed = np.array([r is not None and r.verdict == "fail" for r in quantity.rows])
    title = f"{quantity.title} ({unit_of(quantity.unit)})"
    title += _scale(axes, quantity, np.stack([values - U, values + U]), promise)
    bottom, top = axes.get_ylim()
    known = np.isfinite(values)
    above, below = known & (values > top), known & (values < bottom)
    inside = known & ~above & ~below
    size = 3.4 if place.size <= 60 else 2.0
    # One broken line for all bars: two hundred boards would be thousands of strokes.
    gaps = np.full(place.size, math.nan)
    bars = np.where(inside, U, math.nan)
    axes.plot(
        np.column_stack([place, place, gaps]).ravel(),
        np.column_stack([values - bars, values + bars, gaps]).ravel(),
        color=GREY, linewidth=0.6 if place.size > 60 else 0.9,
    )  # fmt: skip
    for chosen, marker, style in (
        (inside & ~missed, "o", {"color": INK, "markersize": size}),
        (inside & missed, "s", {"color": ORANGE, "markersize": size + 1.4}),
        (inside & odd, "D",
         {"color": ORANGE, "markerfacecolor": "none", "markersize": size + 4.0}),
    ):  # fmt: skip
        axes.plot(place[chosen], values[chosen], marker, **style)
    height = ROW * (top - bottom)
    at = np.where(inside, values, math.nan)
    for chosen, marker, edge, outward in ((above, "^", top, 1), (below, "v", bottom, -1)):
        rows = _rows(np.flatnonzero(chosen), place.size)
        if not rows:
            continue
        last = max(rows)
        at[chosen] = edge + outward * height * (last + 0.5 - np.array(rows))
        axes.set_ylim(**{"top" if outward > 0 else "bottom": edge + outward * height * (last + 1)})
        axes.plot(place[chosen], at[chosen], marker, color=ORANGE, markersize=size + 2.2)
    _labels(axes, quantity, serials, at, inside & (odd | missed), above | below)
    axes.set_xlim(0.4, place.size + 0.6)
    axes.xaxis.get_major_locator().set_params(integer=True, nbins=6, min_n_ticks=1)
    axes.yaxis.get_major_locator().set_params(nbins=4)
    axes.set_title(title, parse_math=False, y=1.0)
    axes.grid(visible=False, axis="x")


def _scale(axes: Any, quantity: Quantity, ends: Floats, promise: Floats) -> str:
    """Scale to the boards that count, their datasheet band, and a limit that is near.

    ends: (2, boards), value less and plus U. Returns what the title has to add.
    """
    counted = np.ones(ends.shape[1], dtype=bool)
    counted[list(quantity.left_out)] = False
    if not np.isfinite(ends[:, counted]).any():
        counted[:] = True
    marks = np.concatenate([ends[:, counted].ravel(), promise[:, counted].ravel()])
    bottom, top = _reach(marks)
    span, added = top - bottom, ""
    room = {"low": 0.08, "high": 0.08}
    for side, limit in (("low", quantity.low), ("high", quantity.high)):
        if limit is None:
            continue
        if not bottom - NEAR * span <= limit <= top + NEAR * span:
            added += f", limit {limit:.6g} off this scale"
            continue
        axes.axhline(limit, color=PURPLE, linewidth=1.6)
        # Outside of what is allowed, where the boards that count are not.
        axes.annotate(
            f"limit {'≥' if side == 'low' else '≤'} {limit:.6g} {unit_of(quantity.unit)}",
            (0.0, limit), xycoords=("axes fraction", "data"), textcoords="offset points",
            xytext=(3, -3) if side == "low" else (3, 3), fontsize=6.6, color=PURPLE,
            va="top" if side == "low" else "bottom",
        )  # fmt: skip
        room[side] = 0.2
        bottom, top = min(bottom, limit), max(top, limit)
    span = (top - bottom) or 0.1 * abs(top) or 1.0
    axes.set_ylim(bottom - room["low"] * span, top + room["high"] * span)
    return added


def _rows(found: NDArray[np.intp], boards: int) -> list[int]:
    """Rows, 0 at the edge, for boards off the scale: neighbours would write over each other."""
    if found.size > LABELS:
        return [0] * int(found.size)
    rows: list[int] = []
    for number, k in enumerate(found):
        alone = not number or k - found[number - 1] > 0.7 * boards
        rows.append(0 if alone else (rows[-1] + 1) % 3)
    return rows


def _labels(
    axes: Any, quantity: Quantity, serials: Sequence[str], at: Floats, inside: Bools, off: Bools
) -> None:  # fmt: skip
    """Serials of the boards that differ, and the value of those ``off`` the scale."""
    if (inside | off).sum() > LABELS:
        return
    middle = float(np.mean(axes.get_ylim()))
    for k in map(int, np.flatnonzero(inside | off)):
        text, row, lift = serials[k], quantity.rows[k], -7 if at[k] > middle else 7
        if off[k]:
            value = rounded(quantity.values[k], row.U if row is not None else None)[0]
            text, lift = f"{text}: {value} {unit_of(quantity.unit)}", 0
        right = k + 1 > 0.6 * len(serials)
        axes.annotate(
            text.replace("$", r"\$"), (k + 1, at[k]), textcoords="offset points",
            xytext=(-6 if right else 6, lift), ha="right" if right else "left", va="center",
            fontsize=6.6,
        )  # fmt: skip


def _band(axes: Any, promise: Floats) -> None:
    """The promise, (3, boards): flat where next to the same for every board, else in steps."""
    if not np.isfinite(promise).any():
        return
    edges = np.arange(promise.shape[1] + 1) + 0.5
    if np.ptp(promise, axis=1).max() < 0.05 * float(np.median(promise[2] - promise[0])):
        edges, promise = edges[[0, -1]], np.median(promise, axis=1)[:, None]
    low, typical, high = np.column_stack([promise, promise[:, -1]])
    axes.fill_between(edges, low, high, step="post", color=SKY, alpha=0.34, linewidth=0)
    axes.plot(
        edges, typical, color=BLUE, linewidth=0.8, linestyle=(0, (5, 3)), drawstyle="steps-post",
    )  # fmt: skip


def _promise(quantity: Quantity, key: str) -> Floats:
    """The promise at each board's own conditions; a board without one borrows its neighbours'."""
    found = np.array(
        [math.nan if r is None or r.predicted is None else r.predicted[key] for r in quantity.rows]
    )
    known = np.isfinite(found)
    if not known.any():
        return found
    return np.asarray(np.interp(np.arange(found.size), np.flatnonzero(known), found[known]))


def _reach(marks: Floats) -> tuple[float, float]:
    finite = marks[np.isfinite(marks)]
    return float(finite.min()), float(finite.max())
