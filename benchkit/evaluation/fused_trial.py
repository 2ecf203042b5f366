"""Judges the fused trial: does the fuse open in time, and is the clamp as it was before?"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from benchkit.evaluation.clamp_trial import (
    AFTER,
    CERTAIN,
    changed,
    lacking,
    remarks_of,
    rows_of,
)
from benchkit.evaluation.clamp_trial_band import CLAMPS, drop_band
from benchkit.evaluation.clamp_trial_read import (
    Change,
    ClampState,
    changes,
    read_state,
)
from benchkit.evaluation.findings import Remark
from benchkit.evaluation.fused_trial_read import Burst, Pulse, read_burst
from benchkit.evaluation.part import Part, ScenarioFound
from benchkit.evaluation.promised import Promised
from benchkit.evaluation.reverse import Figure
from benchkit.evaluation.spelled import paired, small, spanned
from benchkit.evaluation.verdict import Promise, judged, missing
from benchkit.parts.fuse_points import FuseModel
from benchkit.prediction.fuse import fuse_of
from benchkit.prefixes import lasting, spoken
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.stage import Stage

LESS = 0.95
"""Of the current that was asked for: with less the supply was limited elsewhere."""
SCENARIO = "reversed-source"


@dataclass(frozen=True)
class FuseBand:
    """What the fuse's sheet promises at a current: from the fastest to the slowest of its kind."""

    clears: Promise
    let_through: Promise
    peak: Promise


@dataclass(frozen=True)
class FusedDetail:
    """What the section draws. clamp_A2s: what the clamp's sheet has it stand."""

    current_A: float
    voltage_V: float
    fuse: str
    clamp: str
    burst: Burst | None
    band: FuseBand
    clamp_A2s: float | None
    before: ClampState
    after: ClampState
    changes: tuple[Change, ...]
    short: str


def judge_fused(record: Record, promise: Promised) -> Part | None:
    """None unless the stage file has [fused_trial]."""
    asked, stage = record.stage.fused_trial, promise.stage
    reference = fuse_of(stage)
    if asked is None or reference is None or record.stage.stage.topology not in CLAMPS:
        return None
    burst = read_burst(record)
    pulse = burst.pulse if burst is not None else None
    band = fuse_band(stage, reference, pulse.current.value if pulse else asked.current_A)
    before, after = (read_state(record, stage, "before"), read_state(record, stage, "after"))
    found = tuple(changes(before, after))
    short = _short(record, burst, after)
    detail = FusedDetail(
        asked.current_A, asked.voltage_V or record.stage.stage.supply_max_V, reference, stage.main,
        burst, band, getattr(stage.main_part, "surge_A2s", None), before, after, found, short,
    )  # fmt: skip
    hurt = list(remarks_of(stage, after))
    told = [*_of_pulse(record, stage, detail, pulse), *hurt]
    if not any(one.weight == "fault" for one in (*hurt, *remarks_of(stage, before))):
        told += changed(stage, found)
    if short and not any(one.weight == "fault" for one in told):
        told.append(Remark("doubt", f"the fused trial is not whole: {short}"))
    opened = pulse is not None and pulse.clears is not None
    rows = [*_rows(record, detail, pulse), *_after(record, stage, detail, opened)]
    untested = (
        f"{reference} at more than {asked.current_A:g} A, such as a battery drives through it, and "
        "what the supply's output capacitor gave beyond its limit between two readings",
        f"the new {reference}, which the board goes on with: its drop was not measured",
    ) if opened else ()  # fmt: skip
    return Part(tuple(rows), tuple(told), untested, tuple(_scenarios(detail, pulse)), detail)


def fuse_band(stage: Stage, reference: str, current_A: float) -> FuseBand:
    """From the fastest to the slowest fuse of its sheet, cold, at a constant current; and the
    clamp's drop there, as cold."""
    model = stage.models[reference]
    assert isinstance(model, FuseModel)
    typical, fastest = (
        float(law.time_to_melt_s(current_A)) + float(law.arcing_A2s) / current_A**2
        for law in (model.typical, model.fastest)
    )
    clears = Promise(typical, fastest, float(model.slowest_clearing_s(current_A)))
    square = current_A**2
    peak = drop_band(stage, current_A, stage.file.stage.ambient_nominal_C).drop
    through = Promise(square * clears.nominal, square * clears.low, square * clears.high)
    return FuseBand(clears, through, peak)


def _short(record: Record, burst: Burst | None, after: ClampState) -> str:
    """What is missing, in words; "" when it is whole."""
    told = [
        f"the guard ended it, {event.get('text')}" for event in record.events
        if event.get("kind") == "trip" and str(event.get("step", "")).startswith("fused/")
    ]  # fmt: skip
    if burst is None:
        return "; ".join(["the fuse was not blown", *told])
    if lacks := lacking(record, after):
        told.append(f"the clamp was not read again as it should have been: {lacks}")
    return "; ".join(told)


def _finite(promise: Promise) -> Promise | None:
    return promise if all(math.isfinite(v) for v in vars(promise).values()) else None


def _rows(record: Record, detail: FusedDetail, pulse: Pulse | None) -> Iterator[Measurand]:
    limits = record.stage.limits
    at = f"{detail.current_A:g} A reversed"
    why = "the fuse was not blown" if pulse is None else "the fuse did not open"
    if pulse is None or pulse.clears is None or pulse.let_through is None:
        yield missing("fuse_clears", "s", at, None, limits.fuse_clears_max_s, why)
    else:
        told = f"at {spoken(pulse.current.value, 'A')}, cold"
        yield judged(
            "fuse_clears", "s", at, pulse.clears.value, pulse.clears.budget,
            _finite(detail.band.clears), None, limits.fuse_clears_max_s, limits.rule, told,
        )  # fmt: skip
        yield judged(
            "fuse_let_through", "A2s", f"{at}, {detail.clamp} stands no more",
            pulse.let_through.value, pulse.let_through.budget, _finite(detail.band.let_through),
            None, detail.clamp_A2s, limits.rule, told,
        )  # fmt: skip
    if pulse is not None and pulse.peak is not None:
        yield judged(
            "clamp_peak", "V", at, pulse.peak.value, pulse.peak.budget, detail.band.peak, None,
            limits.clamp_peak_max_V, limits.rule,
        )  # fmt: skip
    elif limits.clamp_peak_max_V is not None:
        yield missing("clamp_peak", "V", at, None, limits.clamp_peak_max_V, why)


def _after(record: Record, stage: Stage, detail: FusedDetail, opened: bool) -> Iterator[Measurand]:
    """The clamp again, and how much it changed."""
    if not opened:
        return
    yield from rows_of(record, stage, detail.after, lacking(record, detail.after))
    for each in detail.changes:
        drop = each.current_A is not None
        yield judged(
            "clamp_drop_change" if drop else "clamp_leakage_change", "V" if drop else "A",
            f"{each.current_A:g} A reversed, {AFTER}" if drop
            else f"{record.stage.stage.supply_max_V:g} V the right way round, {AFTER}",
            each.change.value, each.change.budget, None, None, None, record.stage.limits.rule,
        )  # fmt: skip


def _of_pulse(
    record: Record, stage: Stage, detail: FusedDetail, pulse: Pulse | None
) -> Iterator[Remark]:
    """What the burst means, the gravest first."""
    for event in record.events:
        if event.get("kind") == "trip" and str(event.get("step", "")).startswith("fused/"):
            text = str(event.get("text", ""))
            bench = text.startswith(("the supply", "supply_", "time", "the clock"))
            yield Remark(
                "doubt" if bench else "fault",
                f"the guard ended the fused trial, before {detail.fuse} was seen to open: {text}",
            )
    if pulse is None:
        if detail.burst is not None:
            yield Remark(
                "doubt",
                f"no current flowed in the fused trial, though {detail.fuse} and {detail.clamp} "
                "conducted at the proof of polarity",
            )
        return
    if pulse.clears is None:
        yield Remark(
            "fault",
            f"{detail.fuse} did not open: {spoken(pulse.current.value, 'A')} still flowed after "
            f"{spoken(pulse.lasted_s, 's', 2)}, and the slowest fuse that its sheet allows clears "
            f"in {lasting(detail.band.clears.high)}; suspect a larger fuse, or a bridge",
        )
    else:
        yield from _of_time(detail, pulse, pulse.clears)
    U = pulse.current.budget.expanded(CERTAIN).U
    if pulse.current.value + U < LESS * detail.current_A:
        yield Remark(
            "doubt",
            f"the supply gave {spoken(pulse.current.value, 'A')} of the {detail.current_A:g} A "
            "asked for: something else limits the current, and the fuse was not tried at what the "
            "stage file says",
        )
    if pulse.lost or pulse.late:
        why = (
            f"{pulse.lost} reading(s) of the burst overloaded" if pulse.lost
            else "the current was there before the burst's first reading"
        )  # fmt: skip
        yield Remark("doubt", f"{why}: onset and let-through of the fused trial are not known")
    if pulse.peak is not None:
        beyond = drop_band(stage, pulse.current.value, record.stage.stage.ambient_nominal_C).most_V
        spread = pulse.peak.budget.expanded(CERTAIN).U
        if pulse.peak.value - spread > beyond:
            yield Remark(
                "doubt",
                f"while {detail.fuse} opened the guarded port was {spoken(pulse.peak.value, 'V')} "
                f"below zero, further than the tolerance of {detail.clamp} allows "
                f"({spoken(beyond, 'V')})",
            )


def _of_time(detail: FusedDetail, pulse: Pulse, clears: Figure) -> Iterator[Remark]:
    """Another fuse than the sheet's."""
    U = clears.budget.expanded(CERTAIN).U
    band, at = detail.band.clears, spoken(pulse.current.value, "A")
    if clears.value - U > band.high:
        yield Remark(
            "doubt",
            f"{detail.fuse} took {spoken(clears.value, 's')} to clear {at}, longer than the "
            f"slowest that its sheet allows ({spoken(band.high, 's')}): suspect another fuse",
        )
    elif clears.value + U < band.low:
        yield Remark(
            "doubt",
            f"{detail.fuse} cleared {at} in {spoken(clears.value, 's')}, sooner than the fastest "
            f"that its sheet allows ({spoken(band.low, 's')}): suspect another fuse, or one that "
            "was warm or worn",
        )


def _scenarios(detail: FusedDetail, pulse: Pulse | None) -> Iterator[ScenarioFound]:
    """Predicted and found, at the bench's current."""
    at, band = f"at {detail.current_A:g} A", detail.band
    if pulse is None:
        return
    if pulse.clears is None:
        yield ScenarioFound(
            SCENARIO, f"{detail.fuse} opens {at}",
            f"in {spanned(band.clears.low, band.clears.high, 's')}",
            f"not within {small(pulse.lasted_s, 's')}", False,
        )  # fmt: skip
    for what, figure, promise, unit in (
        (f"{detail.fuse} opens {at}, in", pulse.clears, band.clears, "s"),
        (f"let through {at}", pulse.let_through, band.let_through, "A²s"),
        (f"guarded port below zero {at}, at its worst", pulse.peak, band.peak, "V"),
    ):
        if figure is not None:
            U = figure.budget.expanded().U
            yield ScenarioFound(
                SCENARIO, what, spanned(promise.low, promise.high, unit),
                paired(figure.value, U, unit),
                promise.low - U <= figure.value <= promise.high + U,
            )  # fmt: skip
