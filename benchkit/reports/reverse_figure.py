"""The ladder of a trial in reverse: what flowed and what the guarded port saw, against voltage."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from benchkit.evaluation.reverse import Figure, Rung, Trial
from benchkit.evaluation.reverse_band import ReverseBand
from benchkit.evaluation.verdict import Promise
from benchkit.files.stage import Limits
from benchkit.reports.figures import BLUE, INK, ORANGE, PURPLE, SKY, STYLE, as_svg

SEEN = 20.0
"""A limit further off than this many times the largest mark is left out: it would flatten all."""
SCALES = ((1.0, ""), (1e3, "m"), (1e6, "µ"))


def reverse_figure(trial: Trial, bands: Sequence[ReverseBand], limits: Limits) -> str:
    """Two curves side by side as SVG; "" when no rung was reached."""
    if not trial.rungs:
        return ""
    from matplotlib import rc_context
    from matplotlib.figure import Figure as Canvas

    with rc_context(STYLE):
        figure = Canvas(figsize=(7.2, 2.8))
        left, right = figure.subplots(1, 2)
        figure.subplots_adjust(left=0.08, right=0.985, bottom=0.25, top=0.9, wspace=0.24)
        _panel(
            left, trial, [b.leakage for b in bands], lambda rung: rung.leakage, "A",
            limits.leakage_max_A,
        )  # fmt: skip
        left.set_title("Leakage", y=1.0)
        _panel(
            right, trial, [b.guarded for b in bands], lambda rung: rung.guarded, "V",
            limits.guarded_reverse_max_V,
        )  # fmt: skip
        right.set_title("Guarded port below zero", y=1.0)
        # Either panel may lack a line: the first of each name, from both.
        named = {
            name: line
            for axes in (right, left)
            for line, name in zip(*axes.get_legend_handles_labels(), strict=True)
        }
        figure.legend(
            list(named.values()), list(named), loc="lower center", ncols=5, handlelength=1.6,
            columnspacing=1.2, borderaxespad=0.1,
        )  # fmt: skip
        return as_svg(figure, "Leakage and guarded voltage against reverse voltage")


def _panel(
    axes: Any, trial: Trial, promises: Sequence[Promise], of: Callable[[Rung], Figure], unit: str,
    limit: float | None,
) -> None:  # fmt: skip
    volts = np.array([rung.voltage_V for rung in trial.rungs])
    values = np.array([of(rung).value for rung in trial.rungs])
    U = np.nan_to_num([of(rung).budget.expanded().U for rung in trial.rungs], posinf=0.0)
    high = np.array([p.high for p in promises])
    most = max(float((np.abs(values) + U).max()), float(high.max()))
    factor, prefix = next(((f, p) for f, p in SCALES if f * most >= 1.0), (1e9, "n"))
    low, typical = (factor * np.array([getattr(p, key) for p in promises]) for key in
                    ("low", "nominal"))  # fmt: skip
    axes.fill_between(volts, low, factor * high, color=SKY, alpha=0.28, linewidth=0,
                      label="datasheet band (95 % of parts)")  # fmt: skip
    axes.plot(
        volts, typical, color=BLUE, linewidth=0.9, linestyle=(0, (5, 3)),
        label="datasheet, typical part",
    )  # fmt: skip
    style = {"fmt": "o", "markersize": 4.0, "elinewidth": 0.9, "capsize": 2.5}
    axes.errorbar(volts, factor * values, yerr=factor * U, color=INK, label="measured ± U", **style)
    if trial.last is not None and trial.last is not trial.rungs[-1]:
        end = of(trial.last)
        axes.errorbar(
            [trial.last.voltage_V + 0.02 * float(volts.max())], [factor * end.value],
            yerr=[factor * float(np.nan_to_num(end.budget.expanded().U, posinf=0.0))],
            color=ORANGE, markerfacecolor="white", label="at the end of the dwell", **style,
        )  # fmt: skip
    if limit is not None and limit <= SEEN * most:
        axes.axhline(factor * limit, color=PURPLE, linewidth=1.6, label="limit")
    axes.axhline(0.0, color=INK, linewidth=0.6)
    axes.set_xlim(0.0, 1.08 * float(volts.max()))
    axes.set_xlabel("reverse voltage (V)")
    axes.set_ylabel(f"{prefix}{unit}")
