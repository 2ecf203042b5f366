"""The burst of a fused trial: current and guarded voltage against time, and when a fuse of its
sheet clears."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.fused_trial import FusedDetail
from benchkit.evaluation.fused_trial_read import Trace
from benchkit.files.stage import Limits
from benchkit.reports.figures import BLUE, GREY, INK, ORANGE, PURPLE, SKY, STYLE, as_svg

Floats = NDArray[np.float64]

BEFORE, BEYOND = 0.15, 1.3
"""What is drawn before the onset and after the last mark, as a share of what is between."""
MOST = 600
"""More readings than this of a trace are thinned: they would lie on each other."""


def fused_figure(detail: FusedDetail, limits: Limits) -> str:
    """Two panels above each other as SVG, from the onset of the current; "" without a current."""
    burst = detail.burst
    if burst is None or burst.pulse is None:
        return ""
    from matplotlib import rc_context
    from matplotlib.figure import Figure as Canvas

    pulse, band = burst.pulse, detail.band.clears
    marks = [pulse.lasted_s, *(v for v in (band.high, limits.fuse_clears_max_s) if v is not None)]
    shown = BEYOND * max(m for m in marks if math.isfinite(m))
    factor, unit = (1e3, "ms") if shown < 2 else (1.0, "s")
    with rc_context(STYLE):
        figure = Canvas(figsize=(7.2, 3.9))
        upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=[1.25, 1.0])
        figure.subplots_adjust(left=0.085, right=0.985, bottom=0.19, top=0.94, hspace=0.18)
        for axes in (upper, lower):
            if math.isfinite(band.high):
                axes.axvspan(
                    factor * band.low, factor * band.high, color=SKY, alpha=0.28, linewidth=0,
                    label="a fuse of its sheet clears (fastest to slowest)",
                )  # fmt: skip
            axes.axvline(
                factor * band.nominal, color=BLUE, linewidth=0.9, linestyle=(0, (5, 3)),
                label="typical fuse",
            )  # fmt: skip
            if limits.fuse_clears_max_s is not None:
                axes.axvline(factor * limits.fuse_clears_max_s, color=PURPLE, linewidth=1.6,
                             label="limit")  # fmt: skip
            axes.axhline(0.0, color=INK, linewidth=0.6)
        upper.axhline(detail.current_A, color=GREY, linewidth=0.9, linestyle=(0, (1, 2)),
                      label="current asked for")  # fmt: skip
        _draw(upper, burst.current, pulse.onset_s, factor, shown, 1.0)
        upper.set_ylabel("reversed current (A)")
        upper.set_title("Current")
        if burst.guarded is not None:
            _draw(lower, burst.guarded, pulse.onset_s, factor, shown, -1.0)
        if limits.clamp_peak_max_V is not None:
            lower.axhline(-limits.clamp_peak_max_V, color=PURPLE, linewidth=1.6)
        lower.set_ylabel("voltage (V)")
        lower.set_title("Guarded port")
        lower.set_xlabel(f"time from the onset of the current ({unit})")
        lower.set_xlim(-BEFORE * factor * shown, factor * shown)
        handles, names = upper.get_legend_handles_labels()
        figure.legend(handles, names, loc="lower center", ncols=5, handlelength=1.6,
                      columnspacing=1.2, borderaxespad=0.1)  # fmt: skip
        return as_svg(figure, "Current and guarded voltage against time while the fuse opened")


def _draw(
    axes: object, trace: Trace, onset_s: float, factor: float, shown: float, sign: float
) -> None:
    time = trace.time_s - onset_s
    inside = np.flatnonzero((time > -BEFORE * shown) & (time < shown))
    inside = inside[:: max(1, math.ceil(inside.size / MOST))]
    axes.plot(  # type: ignore[attr-defined]  # matplotlib is imported where it is drawn only
        factor * time[inside], sign * trace.value[inside], color=ORANGE, marker=".",
        markersize=2.2, linewidth=0.8, label="measured",
    )  # fmt: skip
