"""How figures, places and verdicts are spelled for the person at the bench."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace

from benchkit.evaluation.verdict import rounded
from benchkit.records.result import Measurand

NAMES = {
    "drop": "Forward drop",
    "warm_drop": "Drop when warm",
    "case_rise": "Final case rise over ambient",
    "thermal_resistance": "Thermal resistance",
    "case_hottest": "Hottest case",
    "junction_margin": "Junction margin",
    "reverse_leakage": "Leakage in reverse",
    "reverse_guarded": "Guarded port below zero, in reverse",
    "drop_change": "Change of the drop by the trial in reverse",
    "on_from": "Supply voltage from which it is on",
    "useful_from": "Supply voltage from which the drop keeps its limit",
    "gate_voltage": "Gate to source",
    "gate_margin": "Gate margin",
    "supply_drop": "Drop at the ends of the supply sweep",
    "battery_current": "Current out of a battery, into a flat one",
    "battery_guarded": "Guarded port, with a battery at the exposed one",
    "clamp_leakage": "Leakage of the clamp",
    "clamp_drop": "Drop of the clamp, reversed",
    "clamp_peak": "Guarded port below zero while the fuse opened",
    "clamp_drop_change": "Change of the clamp's drop by the fused trial",
    "clamp_leakage_change": "Change of the clamp's leakage by the fused trial",
    "fuse_clears": "Time until the fuse had cleared",
    "fuse_let_through": "I²t that the fuse let through",
}
UNITS = {"C": "°C", "A2s": "A²s"}
VERDICTS = {"pass": "PASS", "fail": "FAIL", "undecided": "UNDECIDED"}
NONE = "–"
AS_MEASURED = {"reverse_guarded"}
"""Quantities that are shown in the unit of what was measured, however little is promised."""
SMALL_V = 0.2
"""Voltages of a quantity that stays below this are shown in millivolts."""

_DEGREES = re.compile(r"(?<=\d) C(?![\w/])")
_UNITS = re.compile(r"(?<=\d) (?=(?:[AVWKs]|mV|[mµn]A|K/W|°C|%)(?!\w))")


def named(name: str) -> str:
    """A measurand's name in words."""
    return NAMES.get(name) or name.replace("_", " ").capitalize()


def unit_of(unit: str) -> str:
    """A unit as it is printed."""
    return UNITS.get(unit, unit)


def degrees(text: str) -> str:
    """``25 C`` as ``25 °C`` (the record keeps to plain letters), and no line break in between."""
    return _UNITS.sub("\u00a0", _DEGREES.sub(" °C", text))


def sentence(text: str) -> str:
    """Text with a capital at its start and a full stop at its end."""
    text = degrees(text.strip())
    if not text:
        return text
    return text[0].upper() + text[1:] + ("" if text[-1] in ".!?" else ".")


def moment(stamp: object) -> str:
    """An ISO time as ``2026-03-02 09:15 UTC``; anything else as it is."""
    text = str(stamp) if stamp else ""
    found = re.fullmatch(r"(\d{4}-\d\d-\d\d)T(\d\d:\d\d)(:[\d.]+)?(Z|\+00:00)", text)
    return f"{found[1]} {found[2]} UTC" if found else text or "not recorded"


@dataclass(frozen=True)
class Figures:
    """One row's numbers, rounded to the decimal place that U allows."""

    measured: str
    U: str
    k: str
    nominal: str
    band: str
    limit: str
    en: str


def figures_of(row: Measurand) -> Figures:
    """Spell a row's numbers."""
    measured, spread = rounded(row.measured, row.U)
    places = _places(spread)
    low, high = row.limit["low"], row.limit["high"]
    promised = row.predicted
    bounds = [f"≥ {low:.6g}"] if low is not None else []
    bounds += [f"≤ {high:.6g}"] if high is not None else []
    return Figures(
        NONE if row.measured is None else measured,
        NONE if row.U is None else spread,
        NONE if row.k is None else f"{row.k:.2f}",
        NONE if promised is None else _to(promised["nominal"], places),
        NONE if promised is None
        else f"{_to(promised['low'], places)} to {_to(promised['high'], places)}",
        " and ".join(bounds) or NONE,
        NONE if row.en is None else f"{row.en:.{2 if row.en < 10 else 0}f}",
    )  # fmt: skip


def _places(spread: str) -> int | None:
    if not re.fullmatch(r"[\d.]+", spread):
        return None
    return len(spread.partition(".")[2])


def _to(value: float, places: int | None) -> str:
    # A promise is not worth more than three digits, however well it is measured.
    if places is None or value == 0 or not math.isfinite(value):
        return f"{value:.3g}"
    most = 2 - math.floor(math.log10(abs(value)))
    if round(value, places) == 0:
        return plain(value, 2)
    return f"{value:.{max(0, min(places, most))}f}"


def place_in_band(row: Measurand) -> str:
    """Where in the datasheet band a board sits: 0 % at its lower end, 100 % at its upper."""
    if row.predicted is None or row.measured is None:
        return ""
    low, high = row.predicted["low"], row.predicted["high"]
    if _unseen(row):
        return "not seen"
    if row.measured < low:
        return "below"
    if row.measured > high:
        return "above"
    if high <= low:
        return "within"
    return f"{100 * (row.measured - low) / (high - low):.0f} %"


def _unseen(row: Measurand) -> bool:
    """A figure that is not told from zero, and was promised to be too small to be."""
    return (
        row.unit in ("A", "mA", "µA", "nA") and row.measured is not None and row.U is not None
        and row.predicted is not None and abs(row.measured) <= row.U
        and row.predicted["high"] <= row.U
    )  # fmt: skip


@dataclass(frozen=True)
class Strip:
    """A measurand on one line; positions in 0..100, None where there is nothing to mark."""

    band: tuple[float, float] | None
    nominal: float | None
    value: float
    span: tuple[float, float]
    limits: list[float]
    outside: str
    """"low" or "high" when the value lies off the drawn line."""


def strip_of(row: Measurand) -> Strip | None:
    """The small drawing beside a row: band, typical value, measured with U, limits.

    The line is stretched to hold all of it, but to no more than five bands: a limit further off
    is left out, a value further off is marked at the end.
    """
    if row.measured is None or (row.predicted is None and not any(_limits(row))):
        return None
    if _unseen(row):
        return None
    spread = row.U or 0.0
    marks = [row.measured - spread, row.measured + spread, *_limits(row)]
    if row.predicted is not None:
        low, high = row.predicted["low"], row.predicted["high"]
        width = max(high - low, 1e-12)
        least, most = low - 2 * width, high + 2 * width
        marks = [min(max(mark, least), most) for mark in (*marks, low, high)]
    start, end = min(marks), max(marks)
    pad = 0.06 * (end - start) or 1.0
    start, end = start - pad, end + pad

    def at(value: float) -> float:
        return round(100 * min(max((value - start) / (end - start), 0.0), 1.0), 2)

    promised = row.predicted
    outside = "low" if row.measured < start else "high" if row.measured > end else ""
    return Strip(
        (at(promised["low"]), at(promised["high"])) if promised else None,
        at(promised["nominal"]) if promised else None,
        at(row.measured), (at(row.measured - spread), at(row.measured + spread)),
        [at(limit) for limit in _limits(row) if start < limit < end], outside,
    )  # fmt: skip


def _limits(row: Measurand) -> list[float]:
    return [bound for bound in row.limit.values() if bound is not None]


def plain(value: float, digits: int = 3) -> str:
    """Significant digits without an exponent, which few read at a glance."""
    if value == 0 or not math.isfinite(value):
        return f"{value:g}"
    return f"{value:.{max(0, min(6, digits - 1 - math.floor(math.log10(abs(value)))))}f}"


def shown_in(unit: str, rows: Sequence[Measurand | None]) -> tuple[float, str]:
    """Factor and unit in which figures of one quantity are shown: small voltages in mV, and
    currents in what their values and uncertainties are spelled in without many zeros.

    Voltages: chosen by what is promised where there is a promise, so that a board whose drop is
    far from it is shown in the same unit as its neighbours.
    """
    if unit == "A":
        return _amperes(rows)
    sizes = [
        abs(
            row.measured
            if row.predicted is None or row.name in AS_MEASURED
            else row.predicted["nominal"]
        )
        for row in rows
        if row is not None and row.measured is not None
    ]
    return (1e3, "mV") if unit == "V" and sizes and max(sizes) < SMALL_V else (1.0, unit)


def _amperes(rows: Sequence[Measurand | None]) -> tuple[float, str]:
    most = max(
        (max(abs(row.measured), row.U or 0.0)
         for row in rows if row is not None and row.measured is not None),
        default=1.0,
    )  # fmt: skip
    for factor, unit in ((1.0, "A"), (1e3, "mA"), (1e6, "µA")):
        if factor * most >= 1.0:
            return factor, unit
    return 1e9, "nA"


def rescaled(row: Measurand, factor: float, unit: str) -> Measurand:
    """The row in another unit, its budget excepted."""
    if factor == 1.0:
        return row
    return replace(
        row, unit=unit, measured=None if row.measured is None else factor * row.measured,
        U=None if row.U is None else factor * row.U,
        predicted=row.predicted and {key: factor * v for key, v in row.predicted.items()},
        limit={key: None if v is None else factor * v for key, v in row.limit.items()},
    )  # fmt: skip


def scaled(unit: str, size: float) -> tuple[float, str]:
    """Factor and unit in which a small uncertainty reads well."""
    if unit in ("V", "K", "A") and 0 < size < 0.1:
        return (1e3, "m" + unit) if size >= 1e-4 else (1e6, "µ" + unit)
    return 1.0, "K" if unit == "C" else unit
