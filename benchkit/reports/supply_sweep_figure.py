"""Drop, and the gate where it was read, against supply voltage."""

from __future__ import annotations

from typing import Any

import numpy as np

from benchkit.evaluation.supply_sweep_judged import SupplyDetail
from benchkit.files import StageFile
from benchkit.reports.figures import (
    BLUE,
    GREEN,
    GREY,
    INK,
    ORANGE,
    PALE,
    PURPLE,
    SKY,
    STYLE,
    as_svg,
)

RATIO = 3.0
"""A drop that varies by more than this is drawn logarithmically."""
ROOM = 1.08


def supply_sweep_figure(detail: SupplyDetail, stage: StageFile) -> str:
    """One panel, or two above each other, as SVG; "" when nothing was measured."""
    steps = detail.sweep.steps
    if not steps:
        return ""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    gated = any(step.gate for step in steps)
    with rc_context(STYLE):
        tall = 5.3 if gated else 3.7
        canvas = Figure(figsize=(7.2, tall))
        grid = canvas.add_gridspec(
            2 if gated else 1, 1, height_ratios=[2.2, 1.0] if gated else [1.0], hspace=0.12,
            left=0.095, right=0.985, bottom=0.9 / tall, top=1 - 0.26 / tall,
        )  # fmt: skip
        top = canvas.add_subplot(grid[0])
        _drops(top, detail, stage)
        last = top
        if gated:
            last = canvas.add_subplot(grid[1], sharex=top)
            top.tick_params(labelbottom=False)
            _gates(last, detail)
        _volts_axis(last, detail)
        last.set_xlabel("supply voltage at the port (V), logarithmic")
        named = {
            name: line
            for axes in (last, top)
            for line, name in zip(*axes.get_legend_handles_labels(), strict=True)
        }
        canvas.legend(
            list(named.values()), list(named), loc="lower center", ncols=4, handlelength=1.6,
            columnspacing=1.2, borderaxespad=0.1,
        )  # fmt: skip
        return as_svg(canvas, "Drop against supply voltage")


def _drops(axes: Any, detail: SupplyDetail, stage: StageFile) -> None:
    band, steps, limits = detail.band, detail.sweep.steps, stage.limits
    working = stage.stage
    axes.set_xscale("log")
    shown = [step for step in steps if step.carried]
    drops = np.array([1e3 * step.drop.value for step in shown])
    marks = [drops, 1e3 * band.typical_V]
    least, most = (float(of(np.concatenate(marks))) for of in (np.nanmin, np.nanmax))
    if most > RATIO * least > 0:
        axes.set_yscale("log")
    axes.axvspan(working.supply_min_V, working.supply_max_V, color=PALE, alpha=0.55, linewidth=0,
                 zorder=0, label="supply range of the stage")  # fmt: skip
    axes.fill_between(band.volts, 1e3 * band.low_V, 1e3 * band.high_V, color=SKY, alpha=0.28,
                      linewidth=0, label="datasheet band (95 % of parts)")  # fmt: skip
    axes.plot(band.volts, 1e3 * band.typical_V, color=BLUE, linewidth=0.9, linestyle=(0, (5, 3)),
              label="datasheet, typical part")  # fmt: skip
    axes.plot([step.supply.value for step in shown], drops, "o-", color=INK, linewidth=0.6,
              markersize=4.0, label="measured")  # fmt: skip
    if band.on_level_V is not None:
        axes.axhline(1e3 * band.on_level_V, color=GREEN, linewidth=0.9, linestyle=(0, (2, 2)),
                     label="on below this")  # fmt: skip
    found = detail.on_from
    if found is not None and found.above is not None:
        axes.plot([found.value_V], [1e3 * found.level_V], "D", color=ORANGE, markersize=5.0,
                  label="on from here")  # fmt: skip
    if detail.useful_level_V is not None:
        axes.axhline(1e3 * detail.useful_level_V, color=PURPLE, linewidth=0.9,
                     label="limit of the drop")  # fmt: skip
    label: str | None = "limit of the voltage"
    for limit, level in (
        (limits.on_from_max_V, band.on_level_V), (limits.useful_from_max_V, detail.useful_level_V),
    ):  # fmt: skip
        if limit is not None and level is not None:
            axes.plot([limit], [1e3 * level], "|", color=PURPLE, markersize=18.0,
                      markeredgewidth=2.2, label=label)  # fmt: skip
            label = None
    if axes.get_yscale() == "log":
        _plain_ticks(axes.yaxis, *axes.get_ylim())
    axes.set_title(f"Drop at {detail.sweep.current_A:g} A against supply voltage", y=1.0)
    axes.set_ylabel("drop (mV)")
    axes.yaxis.set_label_coords(-0.075, 0.5)


def _gates(axes: Any, detail: SupplyDetail) -> None:
    read = [step for step in detail.sweep.steps if step.gate is not None]
    volts = np.array([step.gate.value for step in read if step.gate is not None])
    axes.plot([step.supply.value for step in read], volts, "o-", color=INK, linewidth=0.6,
              markersize=4.0, label="measured")  # fmt: skip
    if detail.gate is not None:
        top = detail.sweep.steps[-1].supply.value
        axes.plot([top], [detail.gate.nominal], "_", color=BLUE, markersize=14.0,
                  markeredgewidth=1.4, label="typical, at the highest voltage")  # fmt: skip
        if detail.gate_rating_V is not None:
            rating = detail.gate_rating_V * (1 if detail.gate.nominal > 0 else -1)
            axes.axhline(rating, color=PURPLE, linewidth=1.6, label="rating of the gate")
    axes.axhline(0.0, color=GREY, linewidth=0.6)
    axes.set_ylabel("gate to source (V)")
    axes.yaxis.set_label_coords(-0.075, 0.5)


def _volts_axis(axes: Any, detail: SupplyDetail) -> None:
    supplies = [step.supply.value for step in detail.sweep.steps]
    low = min(supplies[0], float(detail.band.volts[0]))
    high = max(supplies[-1], float(detail.band.volts[-1]))
    axes.set_xlim(low / ROOM, high * ROOM)
    _plain_ticks(axes.xaxis, low / ROOM, high * ROOM)


def _plain_ticks(axis: Any, low: float, high: float) -> None:
    """1, 2, 3, 5, 7 of every decade, written out."""
    from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

    steps = (1.0, 2.0, 3.0, 5.0, 7.0)
    decades = range(int(np.floor(np.log10(low))), int(np.ceil(np.log10(high))) + 1)
    ticks = [s * 10.0**d for d in decades for s in steps if low <= s * 10.0**d <= high]
    axis.set_major_locator(FixedLocator(ticks))
    axis.set_minor_locator(NullLocator())
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
