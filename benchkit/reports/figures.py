"""The curves of a report as inline SVG.

Text stays text: the file is small, can be searched, and is set in the page's own type. A fixed
salt and no metadata make the same record give the same bytes.
"""

from __future__ import annotations

import io
import math
import re
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.soak import Soak
from benchkit.records.result import Measurand
from benchkit.reports.law import FittedLaw
from benchkit.reports.words import shown_in

Floats = NDArray[np.float64]

# From the set of Okabe and Ito, which stays apart for every kind of colour vision; plum besides.
BLUE, ORANGE, GREEN = "#0072B2", "#D55E00", "#009E73"
SKY, AMBER, PURPLE = "#56B4E9", "#E69F00", "#882E72"
INK, GREY, PALE = "#20262B", "#68727A", "#E3E6E8"

MOST_SAMPLES = 240
"""More samples of a soak than this are thinned: they would lie on each other."""

STYLE: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "benchkit",
    "font.family": ["DejaVu Sans"],
    "font.size": 8.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": GREY,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.titlesize": 9.0,
    "axes.titlelocation": "left",
    "axes.titleweight": "bold",
    "axes.titlecolor": INK,
    "axes.grid": True,
    "axes.axisbelow": True,
    "grid.color": PALE,
    "grid.linewidth": 0.6,
    "xtick.color": GREY,
    "ytick.color": GREY,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "legend.facecolor": "white",
    "legend.edgecolor": "none",
    "legend.framealpha": 0.9,
    "legend.borderpad": 0.2,
    "legend.fontsize": 7.5,
    "lines.linewidth": 1.3,
    "hatch.linewidth": 0.5,
    "path.simplify": True,
}


def board_figure(evaluation: Evaluation, law: FittedLaw | str | None) -> str:
    """Drop curve over its residuals, heating curve over its own; "" when there is neither."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    parts = ["drop"] if evaluation.sweep is not None else []
    parts += ["heat"] if evaluation.soak is not None and evaluation.soak.heating.time_s.size else []
    if not parts:
        return ""
    with rc_context(STYLE):
        tall = 3.7 * len(parts)
        figure = Figure(figsize=(7.2, tall))
        ratios = [3.0, 1.0, 0.62, 3.0, 1.0][: 3 * len(parts) - 1]
        grid = figure.add_gridspec(
            len(ratios), 1, height_ratios=ratios, hspace=0.12, left=0.095, right=0.985,
            bottom=0.42 / tall, top=1 - 0.26 / tall,
        )  # fmt: skip
        for number, part in enumerate(parts):
            top = figure.add_subplot(grid[3 * number])
            below = figure.add_subplot(grid[3 * number + 1], sharex=top)
            top.tick_params(labelbottom=False)
            if part == "drop":
                _drop(top, below, evaluation, law)
            elif evaluation.soak is not None:
                _heat(top, below, evaluation.soak)
            for axes in (top, below):
                axes.yaxis.set_label_coords(-0.075, 0.5)
        return as_svg(figure, "Drop against current and case rise against time")


def as_svg(figure: Any, label: str) -> str:
    """An SVG element that fills its place and takes the page's type."""
    out = io.StringIO()
    nothing = dict.fromkeys(("Creator", "Date", "Format", "Type"))
    figure.savefig(out, format="svg", transparent=True, metadata=nothing)
    text = out.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"font-family: [^;\"]*;", "", text)
    text = re.sub(r"font: ([\d.]+px) [^;\"]*", r"font-size: \1", text)
    text = re.sub(r'(<svg [^>]*?) width="[^"]*" height="[^"]*"', r"\1", text, count=1)
    text = re.sub(r"\n *", "\n", text)
    return text.replace("<svg ", f'<svg role="img" aria-label="{label}" ', 1)


def _drop(top: Any, below: Any, evaluation: Evaluation, law: FittedLaw | str | None) -> None:
    sweep, junction = evaluation.sweep, evaluation.stage.conducts == "junction"
    assert sweep is not None
    measured = _measured(evaluation)
    factor, unit = shown_in("V", measured)
    rows = [
        (drop, row)
        for drop, row in zip(evaluation.drops, measured, strict=True)
        if row.predicted is not None
    ]
    if junction and sweep.current_A.min() > 0:
        _log_axis(top, sweep.current_A)
    if rows:
        amps = np.array([drop.current_A for drop, _ in rows])
        low, typical, high = (
            factor * np.array([(row.predicted or {})[key] for _, row in rows])
            for key in ("low", "nominal", "high")
        )
        fine = _between(amps, junction)
        top.fill_between(
            fine, _joined(amps, low, fine, junction), _joined(amps, high, fine, junction),
            color=SKY, alpha=0.28, linewidth=0, label="datasheet band (95 % of parts)",
        )  # fmt: skip
        top.plot(
            fine, _joined(amps, typical, fine, junction), color=BLUE, linewidth=0.9,
            linestyle=(0, (5, 3)), label="datasheet, typical part",
        )  # fmt: skip
    if isinstance(law, FittedLaw):
        top.plot(law.current_A, factor * law.curve_V, color=INK, linewidth=1.0, label="fitted law")
    for up, marker, colour, label in (
        (True, "^", BLUE, "measured, going up"), (False, "v", ORANGE, "measured, coming down"),
    ):  # fmt: skip
        chosen = sweep.rising == up
        if chosen.any():
            top.plot(
                sweep.current_A[chosen], factor * sweep.drop_V[chosen], marker, color=colour,
                markersize=5.0, markerfacecolor=colour if up else "white", label=label,
            )  # fmt: skip
            if isinstance(law, FittedLaw):
                below.plot(
                    sweep.current_A[chosen], 1e3 * law.residual_V[chosen], marker, color=colour,
                    markersize=4.0, markerfacecolor=colour if up else "white",
                )  # fmt: skip
    _drop_limits(top, evaluation, junction, factor)
    if not junction:
        most = float(sweep.current_A.max())
        top.set_xlim(-0.03 * most, 1.05 * most)
    bottom, high = top.get_ylim()
    if not junction:
        bottom = min(0.0, factor * float(sweep.drop_V.min()))
    # Room for a limit's value above the highest of all marks.
    top.set_ylim(bottom, high + 0.06 * (high - bottom))
    top.set_title("Forward drop against current", y=1.0)
    top.set_ylabel(f"drop ({unit})")
    below.set_ylabel("residual (mV)")
    below.set_xlabel("current (A)" + (", logarithmic" if junction else ""))
    below.axhline(0.0, color=INK, linewidth=0.8)
    if isinstance(law, FittedLaw):
        centre = np.array(
            [
                1e3 * float(law.residual_V[sweep.visits(d.current_A)].mean())
                for d in evaluation.drops
            ]
        )
        U = np.array([1e3 * d.budget.expanded().U for d in evaluation.drops])
        below.errorbar(
            [d.current_A for d in evaluation.drops], centre, yerr=np.where(np.isfinite(U), U, 0.0),
            fmt="none", ecolor=GREY, elinewidth=0.9, capsize=2.5,
        )  # fmt: skip
    else:
        below.text(
            0.5, 0.5, "no law was fitted, so there are no residuals", ha="center", va="center",
            transform=below.transAxes, color=GREY,
        )  # fmt: skip
    top.legend(loc="best", ncols=2)


def _drop_limits(top: Any, evaluation: Evaluation, junction: bool, factor: float) -> None:
    """A short bar at each limit, its value above, on the side that is not allowed."""
    span = top.get_xlim()[1]
    label: str | None = "limit"
    assert evaluation.sweep is not None
    reached = evaluation.sweep.targets
    for limit in evaluation.stage.file.limits.drop:
        if limit.current_A not in reached:
            continue
        at = limit.current_A
        ends = (at / 1.12, at * 1.12) if junction else (at - 0.02 * span, at + 0.02 * span)
        most = factor * limit.max_V
        top.plot(ends, (most, most), color=PURPLE, linewidth=2.2, label=label)
        top.annotate(
            f"≤ {most:.6g}", (at, most), xytext=(0, 2.5), textcoords="offset points",
            ha="center", va="bottom", fontsize=7.0, color=PURPLE,
        )  # fmt: skip
        label = None


def _measured(evaluation: Evaluation) -> list[Measurand]:
    """The drop rows that were measured: the first of the result, one for each drop."""
    return [m for m in evaluation.result.measurands if m.name == "drop"][: len(evaluation.drops)]


def _heat(top: Any, below: Any, soak: Soak) -> None:
    heating = soak.heating
    t, rise = heating.time_s, heating.rise_K
    stride = max(1, math.ceil(t.size / MOST_SAMPLES))
    shown = slice(None, None, stride)
    end = float(t[-1]) or 1.0
    fine = np.linspace(0.0, 1.35 * end, 100)
    top.plot(t[shown], rise[shown], ".", color=SKY, markersize=4.0, label="measured")
    if heating.relaxation is not None:
        curve, u = heating.curve(fine), heating.curve_u(fine)
        known = heating.usable
        if known:
            top.fill_between(
                fine, curve - 1.96 * u, curve + 1.96 * u, color=SKY, alpha=0.35, linewidth=0,
                label="fitted curve ± U",
            )  # fmt: skip
        else:
            curve = np.where(fine <= end, curve, np.nan)
        top.plot(fine, curve, color=INK, linewidth=1.0, label="fitted curve")
        below.plot(t[shown], 1e3 * heating.residuals[shown], ".", color=BLUE, markersize=2.6)
        below.axhspan(
            -1960 * heating.noise_K, 1960 * heating.noise_K, color=PALE, zorder=0,
        )  # fmt: skip
        if known:
            U = heating.final_rise_budget.expanded().U
            top.axhspan(
                heating.final_rise_K - U, heating.final_rise_K + U, color=AMBER, alpha=0.3,
                linewidth=0,
            )  # fmt: skip
            top.axhline(
                heating.final_rise_K, color=ORANGE, linewidth=1.2, linestyle=(0, (5, 3)),
                label=f"final rise {heating.final_rise_K:.2f} ± {U:.2f} K",
            )  # fmt: skip
    else:
        below.text(
            0.5, 0.5, "no curve was fitted, so there are no residuals", ha="center", va="center",
            transform=below.transAxes, color=GREY,
        )  # fmt: skip
    top.axvline(end, color=GREY, linewidth=0.8, linestyle=":")
    top.set_xlim(0.0, 1.35 * end)
    top.set_title(f"Case rise over ambient at {soak.current_A:g} A", y=1.0)
    top.set_ylabel("rise (K)")
    below.axhline(0.0, color=INK, linewidth=0.8)
    below.set_ylabel("residual (mK)")
    below.set_xlabel("time since the current was set (s); the dotted line is the end of the soak")
    top.legend(loc="lower right", ncols=2)


def _log_axis(axes: Any, amps: Floats) -> None:
    axes.set_xscale("log")
    low, high = float(amps.min()), float(amps.max())
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    steps = (1, 2, 5) if high / low < 1e3 else (1,)
    ticks = [m * 10.0**d for d in decades for m in steps if low / 1.2 <= m * 10.0**d <= high * 1.2]
    axes.set_xticks(ticks, [f"{tick:g}" for tick in ticks])
    axes.set_xticks([], minor=True)


def _between(amps: Floats, junction: bool) -> Floats:
    if amps.size < 2:
        return amps
    return np.geomspace(amps[0], amps[-1], 60) if junction else np.linspace(amps[0], amps[-1], 60)


def _joined(amps: Floats, volts: Floats, fine: Floats, junction: bool) -> Floats:
    """A promise between the swept currents, smooth and without overshoot."""
    from scipy.interpolate import PchipInterpolator

    if amps.size < 2:
        return volts
    x, at = (np.log(amps), np.log(fine)) if junction else (amps, fine)
    return np.asarray(PchipInterpolator(x, volts)(np.clip(at, x[0], x[-1])))


def thinned(count: int) -> int:
    """Of how many samples one is drawn."""
    return max(1, math.ceil(count / MOST_SAMPLES))
