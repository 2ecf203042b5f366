"""The curves of a prediction as one inline SVG, its panels lettered for the caption."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.files.parts import Mosfet
from benchkit.prediction.curves import Band, Curves
from benchkit.prediction.predict import Prediction
from benchkit.reports.figures import AMBER, BLUE, GREY, INK, PALE, PURPLE, SKY, STYLE, as_svg
from benchkit.reports.prediction_words import quantity
from benchkit.stage import Stage

Floats = NDArray[np.float64]

WIDE, TALL = 7.2, 2.75
"""Of the figure, and of one row of panels, inches."""
MILLIVOLTS_BELOW = 1.0
LEAST_V = 1e-6
"""A stage that drops less than this has no drop to draw."""

Panel = tuple[str, Callable[[Any], None]]


def panels(stage: Stage, prediction: Prediction, drawn: Curves) -> dict[str, Panel]:
    """Title and painter of every panel that this stage has, by a key the caption knows."""
    found: dict[str, Panel] = {}
    if np.nanmax(np.append(drawn.drop.high, drawn.drop.typical), initial=0.0) > LEAST_V:
        found["drop"] = ("Drop against current", lambda a: _drop(a, prediction, drawn))
    if drawn.supply_drop is not None and drawn.gate is not None:
        found["supply"] = (
            "Drop against supply voltage", lambda a: _supply(a, stage, prediction, drawn),
        )  # fmt: skip
        found["gate"] = (
            "Gate against supply voltage", lambda a: _gate(a, stage, prediction, drawn),
        )  # fmt: skip
    if drawn.derated is not None or drawn.fuse_A is not None:
        found["derating"] = ("Current against ambient", lambda a: _derating(a, stage, drawn))
    return found


def lettered(found: dict[str, Panel]) -> dict[str, str]:
    """The letter of each panel."""
    return dict(zip(found, "ABCD", strict=False))


def prediction_figure(found: dict[str, Panel]) -> str:
    """Two panels a row; "" where there are none."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    if not found:
        return ""
    letters = lettered(found)
    # The two against supply voltage stand above each other.
    places = {"drop": (0, 0), "supply": (0, 1), "gate": (1, 1), "derating": (1, 0)}
    if "supply" not in found:
        places = {key: (0, column) for column, key in enumerate(found)}
    rows = 1 + max(row for key, (row, _) in places.items() if key in found)
    tall = TALL * rows
    with rc_context({**STYLE, "axes.titlesize": 8.4}):
        figure = Figure(figsize=(WIDE, tall))
        grid = figure.add_gridspec(
            rows, 2, hspace=0.36, wspace=0.29, left=0.075, right=0.985,
            bottom=0.42 / tall, top=1 - 0.24 / tall,
        )  # fmt: skip
        for key, (title, paint) in found.items():
            axes = figure.add_subplot(grid[places[key]])
            axes.set_title(f"{letters[key]}  {title}", y=1.0)
            paint(axes)
        return as_svg(figure, "; ".join(title for title, _ in found.values()))


def _band(axes: Any, band: Band, factor: float = 1.0) -> None:
    axes.fill_between(
        band.at, factor * band.low, factor * band.high, color=SKY, alpha=0.42, linewidth=0,
        label="95 % of boards",
    )  # fmt: skip
    axes.plot(band.at, factor * band.typical, color=BLUE, linewidth=1.5, label="typical board")


def _drop(axes: Any, prediction: Prediction, drawn: Curves) -> None:
    factor, unit = (1.0, "V")
    if np.nanmax(np.append(drawn.corners[1], drawn.drop.typical)) < MILLIVOLTS_BELOW:
        factor, unit = 1e3, "mV"
    _band(axes, drawn.drop, factor)
    for volts, label in zip(drawn.corners, ("corners", None), strict=True):
        axes.plot(
            drawn.drop.at, factor * volts, color=INK, linewidth=0.8, linestyle=(0, (1.2, 1.6)),
            label=label,
        )  # fmt: skip
    rows = prediction.drop
    axes.plot(
        [row.current_A for row in rows], [factor * row.nominal_V for row in rows], "o",
        color=BLUE, markersize=3.4, markerfacecolor="white", label="in the table",
    )  # fmt: skip
    axes.set_xlim(0.0, 1.03 * float(drawn.drop.at[-1]))
    axes.set_ylim(bottom=0.0)
    axes.set_xlabel("current (A)")
    axes.set_ylabel(f"drop ({unit})")
    axes.legend(loc="best")


def _supply(axes: Any, stage: Stage, prediction: Prediction, drawn: Curves) -> None:
    band = drawn.supply_drop
    assert band is not None
    _band(axes, band)
    axes.set_yscale("log")
    low, high = float(np.nanmin(band.low)), float(np.nanmax(band.high))
    axes.set_ylim(low / 1.3, 1.6 * high)
    steps = (1, 2, 5) if high / low < 300 else (1,)
    decades = range(math.floor(math.log10(low)) - 1, math.ceil(math.log10(high)) + 1)
    ticks = [m * 10.0**d for d in decades for m in steps]
    ticks = [tick for tick in ticks if low / 1.3 <= tick <= 1.6 * high]
    axes.set_yticks(ticks, [quantity(tick, "V") for tick in ticks])
    axes.set_yticks([], minor=True)
    axes.set_ylabel("drop, logarithmic")
    _against_supply(axes, stage, drawn, prediction)
    _write_useful(axes, prediction)
    axes.legend(loc="upper right")


def _gate(axes: Any, stage: Stage, prediction: Prediction, drawn: Curves) -> None:
    main = stage.main_part
    assert isinstance(main, Mosfet)
    assert drawn.gate is not None
    _band(axes, drawn.gate)
    rated = main.gate_source_max_V
    axes.axhline(rated, color=PURPLE, linewidth=1.6)
    axes.set_ylim(0.0, 1.18 * max(rated, float(np.nanmax(drawn.gate.high, initial=0.0))))
    axes.annotate(
        f"rated {quantity(rated, 'V')}", (0.0, rated), xycoords=("axes fraction", "data"),
        xytext=(3, 2.5), textcoords="offset points", fontsize=7.2, color=PURPLE,
    )  # fmt: skip
    axes.set_ylabel("gate against source (V)")
    _against_supply(axes, stage, drawn, prediction)


def _against_supply(axes: Any, stage: Stage, drawn: Curves, prediction: Prediction) -> None:
    """What both panels share: axis, supply range, and where it begins and ends to be good."""
    working = stage.file.stage
    assert drawn.supply_drop is not None
    last = float(drawn.supply_drop.at[-1])
    axes.set_xlim(0.0, last)
    axes.set_xlabel("supply voltage (V)")
    least, most = working.supply_min_V, working.supply_max_V
    axes.axvspan(least, most, facecolor=PALE, alpha=0.75, linewidth=0, zorder=0)
    for edge in (least, most):
        axes.axvline(edge, color=GREY, linewidth=0.6, zorder=0.5)
    for volts, _, _ in _useful(prediction):
        axes.axvline(volts, color=INK, linewidth=1.0, linestyle=(0, (5, 2.5)))


def _write_useful(axes: Any, prediction: Prediction) -> None:
    """On the upper of the two panels: the lines of both are in line."""
    for volts, text, side in _useful(prediction):
        if volts <= axes.get_xlim()[1]:
            right = side == "right"
            axes.annotate(
                f"{text} {volts:.1f} V", (volts, 0.56), xycoords=("data", "axes fraction"),
                xytext=(2.5 if right else -2.5, 0), textcoords="offset points",
                ha="left" if right else "right", va="center", rotation=90, fontsize=7.0, color=INK,
            )  # fmt: skip


def _useful(prediction: Prediction) -> Iterator[tuple[float, str, str]]:
    low, high = prediction.lowest_useful_supply_V, prediction.highest_gate_supply_V
    if low is not None:
        yield low, "useful from", "right"
    if high is not None and math.isfinite(high):
        yield high, "gate up to", "left"


def _derating(axes: Any, stage: Stage, drawn: Curves) -> None:
    working = stage.file.stage
    if drawn.derated is not None:
        axes.fill_between(
            drawn.ambient_C, drawn.derated.low, drawn.derated.typical, color=SKY, alpha=0.42,
            linewidth=0,
        )  # fmt: skip
        axes.plot(drawn.ambient_C, drawn.derated.typical, color=BLUE, label="typical board")
        axes.plot(
            drawn.ambient_C, drawn.derated.low, color=BLUE, linewidth=1.1,
            linestyle=(0, (5, 2)), label="97.5 % of boards carry this",
        )  # fmt: skip
    if drawn.fuse_A is not None:
        axes.plot(
            drawn.ambient_C, drawn.fuse_A, color=AMBER, linewidth=1.3,
            linestyle=(0, (3, 1.5, 1, 1.5)), label="the fuse, for good",
        )  # fmt: skip
    axes.plot(
        [working.ambient_max_C], [working.current_max_A], "D", color=INK, markersize=5.0,
        label="asked: highest of both", clip_on=False, zorder=4,
    )  # fmt: skip
    axes.set_xlim(float(drawn.ambient_C[0]), float(drawn.ambient_C[-1]))
    axes.set_ylim(0.0, 1.25 * max(working.current_max_A, float(np.max(drawn.fuse_A))
                                  if drawn.fuse_A is not None else 0.0))  # fmt: skip
    axes.set_xlabel("ambient (°C)")
    axes.set_ylabel("current (A)")
    axes.legend(loc="lower left")
