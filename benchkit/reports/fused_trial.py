"""The section of a run's report on the fused trial."""

from __future__ import annotations

import math
from collections.abc import Iterator

from benchkit.evaluation.clamp_trial_read import Change, ClampState
from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.fused_trial import FusedDetail
from benchkit.evaluation.reverse import Figure
from benchkit.evaluation.spelled import NONE, paired, small
from benchkit.evaluation.verdict import Promise
from benchkit.prefixes import lasting, spoken
from benchkit.records.record import Record
from benchkit.reports.fused_trial_figure import fused_figure
from benchkit.reports.section import Section, Table

KEY = (
    "Band: from the fastest to the slowest fuse of its sheet at the current measured, cold; of the "
    "clamp, 95 % of parts. At most: your limits, and of I²t what the clamp's surge rating stands."
)
CHANGE_KEY = (
    "Both were read by one meter on one range: what its gain and the shunt are off by is the same "
    "in both. Drops are compared at the junction temperature of the first."
)
CAUTION = (
    "A fuse that does not break what flows, or a clamp that gives way, can burst: wear eye "
    "protection. What was tried is the supply's current; a battery can drive far more."
)


def fused_section(record: Record, evaluation: Evaluation) -> Section | None:
    """None for a run whose stage file has no [fused_trial] table."""
    detail = next((p.detail for p in evaluation.parts if isinstance(p.detail, FusedDetail)), None)
    if detail is None:
        return None
    tables = []
    if rows := list(_rows(record, detail)):
        heads = ["While the fuse opened", "Measured ± U", "Typical", "Datasheet band", "At most"]
        tables.append(Table("", heads, rows, KEY))
    if changed := list(_changes(detail)):
        heads = ["Of the clamp", "Before", "After", "Change ± U"]
        tables.append(Table("What it did to the clamp", heads, changed, CHANGE_KEY))
    return Section(
        "fused-trial", "Full current the wrong way round", list(_sentences(record, detail)),
        fused_figure(detail, record.stage.limits), tables, CAUTION,
    )  # fmt: skip


def _sentences(record: Record, detail: FusedDetail) -> Iterator[str]:
    pulse = detail.burst.pulse if detail.burst is not None else None
    if detail.burst is not None:
        yield (
            f"With the leads crossed the supply drove up to {detail.current_A:g} A from "
            f"{detail.voltage_V:g} V through {detail.fuse} and {detail.clamp}, and a meter read "
            "current and guarded voltage in quick succession from before it was switched on."
        )
    if pulse is not None and pulse.clears is not None:
        yield (
            f"{detail.fuse} had cleared {spoken(pulse.current.value, 'A')} after "
            f"{paired(pulse.clears.value, pulse.clears.budget.expanded().U, 's')}."
        )
    elif pulse is not None:
        yield (
            f"{detail.fuse} did not open within {lasting(pulse.lasted_s)}; the output was then "
            "switched off."
        )
    if record.said("new-fuse"):
        yield (
            f"Then a new {detail.fuse} was put in, and drop and leakage of {detail.clamp} were "
            "read again."
        )
    if detail.short:
        yield f"The trial is not whole: {detail.short}."


def _rows(record: Record, detail: FusedDetail) -> Iterator[list[str]]:
    pulse, limits = detail.burst.pulse if detail.burst is not None else None, record.stage.limits
    if pulse is None:
        return
    yield ["current", _pair(pulse.current, "A"), f"{detail.current_A:g} A asked for", NONE, NONE]
    band = detail.band
    rows: tuple[tuple[str, Figure | None, Promise, float | None, str], ...] = (
        ("onset to cleared", pulse.clears, band.clears, limits.fuse_clears_max_s, "s"),
        ("let through, I²t", pulse.let_through, band.let_through, detail.clamp_A2s, "A²s"),
        ("guarded port below zero, at its worst", pulse.peak, band.peak, limits.clamp_peak_max_V,
         "V"),
    )  # fmt: skip
    for what, figure, promise, most, unit in rows:
        if figure is None:
            continue
        low, high = promise.low, promise.high
        yield [
            what, _pair(figure, unit), _three(promise.nominal, unit), _between(low, high, unit),
            NONE if most is None else spoken(most, unit),
        ]  # fmt: skip


def _three(value: float, unit: str) -> str:
    return spoken(value, unit) if math.isfinite(value) else NONE


def _between(low: float, high: float, unit: str) -> str:
    if not math.isfinite(high):
        return f"{small(low, unit)} or more"
    first, last = _three(low, unit), _three(high, unit)
    return first if first == last else f"{first} to {last}"


def _changes(detail: FusedDetail) -> Iterator[list[str]]:
    for each in detail.changes:
        first, second = (_of(state, each) for state in (detail.before, detail.after))
        unit = "A" if each.current_A is None else "V"
        name = "leakage" if each.current_A is None else f"drop at {each.current_A:g} A"
        yield [name, _pair(first, unit), _pair(second, unit), _pair(each.change, unit)]


def _of(state: ClampState, each: Change) -> Figure | None:
    if each.current_A is None:
        return state.leakage.leakage if state.leakage is not None else None
    return next((d.drop for d in state.drops if d.target_A == each.current_A), None)


def _pair(figure: Figure | None, unit: str) -> str:
    return NONE if figure is None else paired(figure.value, figure.budget.expanded().U, unit)
