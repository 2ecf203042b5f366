"""The figures of a lot, board by board, against limit and datasheet band."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.reports.figures import BLUE, GREY, INK, ORANGE, PURPLE, SKY, STYLE, as_svg
from benchkit.reports.quantities import Quantity
from benchkit.reports.words import unit_of

Floats = NDArray[np.float64]
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
        tall = 1.5 * rows + 0.3
        figure = Figure(figsize=(7.2, tall))
        grid = figure.add_gridspec(
            rows, 2, hspace=0.36, wspace=0.18, left=0.07, right=0.99,
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
    odd = np.zeros(place.size, dtype=bool)
    odd[list(quantity.statistics.outliers)] = True
    missed = np.array([r is not None and r.verdict == "fail" for r in quantity.rows])
    size = 3.4 if place.size <= 60 else 2.0
    # One broken line for all bars: two hundred boards would be thousands of strokes.
    gaps = np.full(place.size, math.nan)
    axes.plot(
        np.column_stack([place, place, gaps]).ravel(),
        np.column_stack([values - U, values + U, gaps]).ravel(),
        color=GREY, linewidth=0.6 if place.size > 60 else 0.9,
    )  # fmt: skip
    plain = ~missed
    axes.plot(place[plain], values[plain], "o", color=INK, markersize=size)
    axes.plot(
        place[missed], values[missed], "s", color=ORANGE, markersize=size + 1.4,
    )  # fmt: skip
    axes.plot(
        place[odd], values[odd], "D", color=ORANGE, markerfacecolor="none", markersize=size + 4.0,
    )  # fmt: skip
    named = [int(k) for k in np.flatnonzero((odd | missed) & np.isfinite(values))]
    for k in named if len(named) <= LABELS else []:
        right = place[k] > 0.7 * place.size
        axes.annotate(
            serials[k].replace("$", r"\$"), (place[k], values[k]), textcoords="offset points",
            xytext=(-6 if right else 6, 3), ha="right" if right else "left", fontsize=6.6,
        )  # fmt: skip
    title = f"{quantity.title} ({unit_of(quantity.unit)})"
    bottom, top = _reach(np.concatenate([values - U, values + U, *promise]))
    for limit in (quantity.low, quantity.high):
        if limit is None:
            continue
        if bottom - 1.5 * (top - bottom) <= limit <= top + 1.5 * (top - bottom):
            axes.axhline(limit, color=PURPLE, linewidth=1.8)
            bottom, top = min(bottom, limit), max(top, limit)
        else:
            title += f", limit {limit:g} off this scale"
    pad = 0.08 * (top - bottom) or 0.05 * abs(top) or 1.0
    axes.set_ylim(bottom - pad, top + pad)
    axes.set_xlim(0.4, place.size + 0.6)
    axes.xaxis.get_major_locator().set_params(integer=True, nbins=6, min_n_ticks=1)
    axes.yaxis.get_major_locator().set_params(nbins=4)
    axes.set_title(title, parse_math=False, y=1.0)
    axes.grid(visible=False, axis="x")


def _band(axes: Any, promise: Floats) -> None:
    """The promise, (3, boards): flat where next to the same for every board, else in steps."""
    if not np.isfinite(promise).any():
        return
    edges = np.arange(promise.shape[1] + 1) + 0.5
    if np.ptp(promise, axis=1).max() < 0.05 * float(np.median(promise[2] - promise[0])):
        edges, promise = edges[[0, -1]], np.median(promise, axis=1)[:, None]
    low, typical, high = np.column_stack([promise, promise[:, -1]])
    axes.fill_between(edges, low, high, step="post", color=SKY, alpha=0.28, linewidth=0)
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
