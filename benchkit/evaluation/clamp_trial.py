"""Judges the trial of a clamp: rows, and what they mean."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from benchkit.evaluation.clamp_trial_band import CLAMPS
from benchkit.evaluation.clamp_trial_read import Change, ClampDrop, ClampState, When, read_state
from benchkit.evaluation.findings import Remark
from benchkit.evaluation.part import Part
from benchkit.evaluation.promised import Promised
from benchkit.evaluation.reverse import Figure
from benchkit.evaluation.verdict import judged, missing
from benchkit.prefixes import spoken
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.stage import Stage

CERTAIN = 0.999
"""Coverage at which something is remarked on: several things are looked at of every board."""
FAR, FLOWS_A = 10.0, 1e-3
"""A leakage this many times beyond the band, and this much, is no longer one of a sound part."""
UNSAID_A = 10e-6
"""What a clamp whose sheet gives no leakage may leak without remark (judgement)."""
AFTER = "after the fuse had blown"
DEAD_V = 0.2
"""At the proof of polarity a short takes the volt down to less than this, and no junction does."""


@dataclass(frozen=True)
class ClampDetail:
    """What the section draws. after: where a fuse was blown in between."""

    before: ClampState
    after: ClampState | None
    changes: tuple[Change, ...]
    short: str


def judge_clamp(record: Record, promise: Promised) -> Part | None:
    """None unless the stage file has a clamp topology and [reverse]."""
    file = record.stage
    if file.reverse is None or file.stage.topology not in CLAMPS:
        return None
    stage, state = promise.stage, read_state(record, promise.stage, "before")
    short = lacking(record, state)
    told = [*_ended(record, stage, state), *remarks_of(stage, state)]
    home = list(_at_home(record, stage)) if state.leakage is None and not state.drops else []
    if short and not told and not home:
        told.append(Remark("doubt", f"the trial of the clamp is not whole: {short}"))
    rows = tuple(rows_of(record, stage, state, short))
    full = f"{file.reverse.current_limit_A:g} A"
    untested = () if file.fused_trial is not None else (
        f"reversed polarity with more than {full} behind it: the clamp conducts, and what clamp "
        "and fuse do at the full current of a source was not tried",
    )  # fmt: skip
    return Part(rows, (*home, *told), untested, (), ClampDetail(state, None, (), short))


def lacking(record: Record, state: ClampState) -> str:
    """What is missing of a state, in words; "" when it is whole."""
    trips = [
        str(e.get("text", "")) for e in record.events
        if e.get("kind") == "trip" and str(e.get("step", "")).startswith(f"clamp/{state.when}")
    ]  # fmt: skip
    told = [f"the guard ended it, {text}" for text in trips]
    if state.leakage is None and not state.drops:
        return "; ".join(["it did not take place", *told])
    if state.leakage is None:
        return "; ".join(["the leakage was not read", *told])
    if not state.drops:
        return "; ".join(["the drop was not read", *told])
    told += [
        str(e.get("text", "")) for e in record.events
        if e.get("kind") == "clamp-cut"
        and str(e.get("step", "")).startswith(f"clamp/{state.when}")
    ]  # fmt: skip
    return "; ".join(told)


def rows_of(record: Record, stage: Stage, state: ClampState, short: str) -> Iterator[Measurand]:
    """Leakage and drops of one state; a limit that was not measured is undecided."""
    limits, top = record.stage.limits, record.stage.stage.supply_max_V
    late = [AFTER] if state.when == "after" else []
    way = f"{top:g} V the right way round"
    if state.leakage is not None:
        found = state.leakage
        yield judged(
            "clamp_leakage", "A", ", ".join([way, *late, f"case at {found.case_C:.1f} C"]),
            found.leakage.value, found.leakage.budget, found.band.leakage, None,
            limits.leakage_max_A, limits.rule, _seen(found.leakage, limits.leakage_max_A),
        )  # fmt: skip
    elif limits.leakage_max_A is not None:
        yield missing("clamp_leakage", "A", ", ".join([way, *late]), None, limits.leakage_max_A,
                      f"the trial of the clamp is not whole: {short}")  # fmt: skip
    last = state.drops[-1] if state.drops else None
    for drop in state.drops:
        judge_it = drop is last and (drop.state == "junction" or not short)
        yield judged(
            "clamp_drop", "V",
            ", ".join([f"{drop.target_A:g} A reversed", *late, f"case at {drop.case_C:.1f} C"]),
            drop.drop.value, drop.drop.budget, drop.band.drop, None,
            limits.guarded_reverse_max_V if judge_it else None, limits.rule,
            "" if drop.state == "junction" else f"it looks like {_article(drop.state)}",
        )  # fmt: skip
    if limits.guarded_reverse_max_V is not None and (last is None or last.state != "junction"):
        assert stage.file.reverse is not None
        at = ", ".join([f"{stage.file.reverse.current_limit_A:g} A reversed", *late])
        why = f"the trial of the clamp is not whole: {short or 'no clamp was seen'}"
        yield missing("clamp_drop", "V", at, None, limits.guarded_reverse_max_V, why)


def _article(state: str) -> str:
    return "an open circuit" if state == "open" else "a short"


def _seen(leakage: Figure, most: float | None) -> str:
    """What the bench can see of so small a current, where that is not enough."""
    U, told = leakage.budget.expanded().U, []
    if abs(leakage.value) <= U:
        told.append(f"not seen: below {spoken(max(leakage.value, 0.0) + U, 'A', 2)}")
    if most is not None and most <= U:
        told.append("the limit is less than this bench can see")
    return "; ".join(told)


def remarks_of(stage: Stage, state: ClampState) -> Iterator[Remark]:
    """What a state means for the clamp."""
    name = stage.main
    late = f" {AFTER}" if state.when == "after" else ""
    if state.leakage is not None:
        yield from _leaking(stage, state, late)
    for drop in state.drops:
        if drop.state == "open":
            yield Remark(
                "fault",
                f"reversed, nothing conducts{late}: with {spoken(drop.driven_V, 'V')} at the "
                f"exposed port only {spoken(drop.current.value, 'A', 2)} flow and the guarded port "
                f"is {spoken(drop.drop.value, 'V', 2)} below zero, so {_gone(stage, drop)}",
            )
            return
        if drop.state == "short":
            yield Remark(
                "fault",
                f"{name} is shorted{late}: at {spoken(drop.current.value, 'A')} it drops "
                f"{spoken(drop.drop.value, 'V')} only, which no junction does",
            )
            return
    yield from _outside(name, state.drops, late)


def _gone(stage: Stage, drop: ClampDrop) -> str:
    """Which of them is open: the voltage is where the gap is."""
    if drop.drop.value > 0.5 * drop.driven_V:
        return f"{stage.main} is open or missing"
    between = [stage.names[role] for role in ("fuse", "lead") if role in stage.names]
    return f"{' or '.join(between) or 'a joint'} is open, blown or missing"


def _ended(record: Record, stage: Stage, state: ClampState) -> Iterator[Remark]:
    """The current limit ended a reading where a sound clamp stays far below it."""
    for event in record.events:
        text, step = str(event.get("text", "")), str(event.get("step", ""))
        if event.get("kind") != "trip" or not text.startswith("the supply"):
            continue
        if step == f"clamp/{state.when}/leakage":
            yield Remark(
                "fault",
                f"{stage.main} leaks more than the supply's current limit allowed, the right way "
                f"round: the guard ended the reading, {text}",
            )
        elif step == f"clamp/{state.when}/approach":
            yield Remark(
                "fault",
                f"{stage.main} conducts far more than a junction does below a volt, as if it were "
                f"shorted: the guard ended the reading, {text}",
            )


def _outside(name: str, drops: tuple[ClampDrop, ...], late: str) -> Iterator[Remark]:
    for drop in drops:
        U = drop.drop.budget.expanded(CERTAIN).U
        less = drop.drop.value + U < drop.band.least_V
        if not less and not drop.drop.value - U > drop.band.most_V:
            continue
        edge = drop.band.least_V if less else drop.band.most_V
        yield Remark(
            "doubt",
            f"at {drop.target_A:g} A {name} drops {spoken(drop.drop.value, 'V')}{late}, "
            f"{'less than the least' if less else 'more than the most'} that its datasheet's "
            f"tolerance allows ({spoken(edge, 'V')}): suspect another part",
        )
        return


def _leaking(stage: Stage, state: ClampState, late: str) -> Iterator[Remark]:
    assert state.leakage is not None
    found = state.leakage
    leakage, U = found.leakage, found.leakage.budget.expanded(CERTAIN).U
    printed = bool(getattr(stage.main_part, "leakage", None))
    most = max(found.band.most_A, 0.0 if printed else UNSAID_A)
    if leakage.value - U <= most:
        return
    far = leakage.value - U > max(FAR * most, FLOWS_A)
    yield Remark(
        "fault" if far else "doubt",
        f"{stage.main} leaks{late}: at {spoken(found.voltage_V, 'V')} the right way round "
        f"{spoken(leakage.value, 'A')} ± {spoken(U, 'A', 2)} flow through it, "
        f"{'far ' if far else ''}more than the most that its datasheet's tolerance allows "
        f"({spoken(most, 'A')})",
    )


def _at_home(record: Record, stage: Stage) -> Iterator[Remark]:
    """A run that ended at its first proof of polarity: the volt was taken down by the board."""
    first = next((e for e in record.events if e.get("kind") == "trip"), None)
    if first is None or first.get("step") != "polarity" or record.steps("sweep/"):
        return
    read = {
        point: [r.value for r in record.at("polarity", f"supply_{point}")]
        for point in ("voltage", "current")
    }
    if not read["voltage"] or max(read["current"]) < FLOWS_A:
        yield Remark(
            "doubt",
            f"the supply was brought to its limit by the first volt at the guarded port: "
            f"{stage.main} may be shorted or fitted the wrong way round, or the leads are crossed",
        )
        return
    volts = read["voltage"][-1]
    if abs(volts) < DEAD_V:
        yield Remark(
            "fault",
            f"the guarded port is shorted: the first volt was taken down to {spoken(volts, 'V')}, "
            f"less than a junction leaves; suspect {stage.main} to be a short",
        )
    else:
        yield Remark(
            "fault",
            f"{stage.main} conducts the right way round: the first volt at the guarded port was "
            f"taken down to {spoken(volts, 'V')}, as by a junction; it is fitted the wrong way "
            "round, or the leads are crossed",
        )


def changed(stage: Stage, found: tuple[Change, ...]) -> Iterator[Remark]:
    """The trial is to leave the clamp as it was."""
    worst = [
        (abs(each.change.value) / U, each, U)
        for each in found
        if (U := each.change.budget.expanded(CERTAIN).U) < abs(each.change.value)
    ]
    if not worst:
        return
    _, each, U = max(worst, key=lambda one: one[0])
    way = "more" if each.change.value > 0 else "less"
    size = abs(each.change.value)
    what = (
        f"it leaks {spoken(size, 'A')} {way}" if each.current_A is None
        else f"at {each.current_A:g} A it drops {spoken(size, 'V')} {way}"
    )  # fmt: skip
    most = spoken(U, "A" if each.current_A is None else "V", 2) if math.isfinite(U) else "nothing"
    yield Remark(
        "fault",
        f"the trial hurt the clamp: {what} than before, and no more than {most} can be the "
        f"measurement's ({stage.main})",
    )


__all__ = ["AFTER", "ClampDetail", "When", "changed", "judge_clamp", "lacking", "rows_of"]
