"""The rows and the remarks of a battery trial: what its states mean for the stage."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from benchkit.errors import InputError
from benchkit.evaluation.battery_trial import Standing, State, read_states
from benchkit.evaluation.battery_trial_agreement import agreement, ended
from benchkit.evaluation.battery_trial_band import StateBand, state_bands
from benchkit.evaluation.battery_trial_circuits import BACK, FLAT, ON, Around, around_of
from benchkit.evaluation.battery_trial_words import (
    CERTAIN,
    condition,
    flows,
    remarks_of_back_feed,
    remarks_of_flat,
    remarks_of_reversed,
    started_at,
    untested,
)
from benchkit.evaluation.findings import Remark
from benchkit.evaluation.part import Part, ScenarioFound
from benchkit.evaluation.promised import Promised
from benchkit.evaluation.verdict import judged, missing
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.stage import Stage

KEPT = 0.9
"""Equipment that is on is to keep this share of its own voltage, as predictions have it."""


@dataclass(frozen=True)
class Judged:
    """One state as it was found, beside what the datasheets promise there.

    pairs: every standing with its band. stands: None where the trial cannot tell. answer: the same
    in a few words.
    """

    state: State
    pairs: tuple[tuple[Standing, StateBand], ...]
    stands: bool | None
    answer: str


@dataclass(frozen=True)
class BatteryFound:
    """For the report."""

    around: Around
    states: tuple[Judged, ...]


def judge_battery_trial(record: Record, promise: Promised) -> Part | None:
    """None for a stage file without [battery_trial]."""
    trial = record.stage.battery_trial
    if trial is None:
        return None
    try:
        around = around_of(record.stage, record.bench)
    except InputError as error:
        return Part((), (Remark("doubt", f"the battery trial is not whole: {error}"),))
    stage = promise.stage
    found = tuple(judge(stage, around, state, record) for state in read_states(record))
    remarks = [remark for one in found for remark in _remarks(stage, around, one)]
    return Part(
        tuple(sorted(
            (row for one in found for row in _rows(stage, around, one)), key=lambda row: row.name
        )),
        tuple(remarks),
        tuple(untested(trial)),
        tuple(scenario for one in found for scenario in _scenarios(stage, around, one)),
        BatteryFound(around, found),
    )  # fmt: skip


def judge(stage: Stage, around: Around, state: State, record: Record) -> Judged:
    """A state with its bands, and whether the stage stands it."""
    bands = _bands(stage, around, state)
    pairs = tuple((s, bands.get(s.volts) or next(iter(bands.values()))) for s in state.standings)
    if state.trips:
        return Judged(state, pairs, None, "the guard ended it")
    if not pairs:
        return Judged(state, pairs, None, "not done")
    if state.name == FLAT:
        started = started_at(around, pairs)
        answer = "not charged" if started is None else f"charged from {started:.3g} V on"
        return Judged(state, pairs, None, answer)
    (standing, band), *_ = pairs
    if state.name == BACK:
        drains = flows(around, state.name, standing)
        return Judged(state, pairs, None, "drains" if drains else "does not drain")
    if flows(around, state.name, standing) or state.conducted:
        if stage.conducts == "lead" and band.conducts:
            return Judged(state, pairs, None, "conducts, as it must")
        return Judged(state, pairs, False, "does not stand: it conducts")
    U = standing.guarded.budget.expanded(CERTAIN).U
    least = KEPT * around.set_V if state.name == ON else record.bench.guard.guarded_min_V
    if standing.guarded.worst + U < least:
        return Judged(state, pairs, False, "does not stand: the guarded port is pulled down")
    return Judged(state, pairs, True, "stands")


def _rows(stage: Stage, around: Around, found: Judged) -> Iterator[Measurand]:
    name, limits = found.state.name, stage.file.limits
    most = None if name == FLAT else limits.battery_current_max_A
    # Of a flat battery that recovers, what counts is how it begins and where it begins to charge.
    shown = dict(enumerate(found.pairs)) if name != FLAT else {
        k: found.pairs[k] for k in (0, len(found.pairs) - 1) if found.pairs
    }  # fmt: skip
    if not shown and most is not None:
        why = f"the battery trial is not whole: {name}, {found.state.short}"
        yield missing("battery_current", "A", condition(around, name, None), None, most, why)
    for standing, band in shown.values():
        at = condition(around, name, standing)
        promises = (None, None) if standing.proof else (band.current, band.guarded)
        yield judged(
            "battery_current", "A", at, standing.current.value, standing.current.budget,
            promises[0], None, most, limits.rule,
        )  # fmt: skip
        yield judged(
            "battery_guarded", "V", at, standing.guarded.value, standing.guarded.budget,
            promises[1], None, None, limits.rule,
        )  # fmt: skip


def _remarks(stage: Stage, around: Around, found: Judged) -> Iterator[Remark]:
    state = found.state
    told: list[Remark] = []
    if state.name == FLAT:
        told += remarks_of_flat(stage, around, found.state, found.pairs)
    elif state.name == BACK:
        told += remarks_of_back_feed(stage, around, found.state, found.pairs)
    else:
        predicted = _bands(stage, around, state)[around.emf_V]
        told += remarks_of_reversed(
            stage, around, state, found.pairs, predicted, stands=found.stands,
            pulled=found.answer.endswith("down"),
        )  # fmt: skip
    yield from told
    if state.short and not told:
        yield Remark(
            "doubt", f"the battery trial is not whole: {state.name}, {state.short}"
        )  # fmt: skip


def _bands(stage: Stage, around: Around, state: State) -> dict[float, StateBand]:
    """As warm as the stage was when the state began; that of a proof is the full voltage's."""
    case_C = state.standings[0].case_C if state.standings else stage.file.stage.ambient_nominal_C
    return state_bands(stage, around, state.name, case_C)


def _scenarios(stage: Stage, around: Around, found: Judged) -> Iterator[ScenarioFound]:
    """Of a flat battery that recovers: how it begins, how it ends, and where it is not as
    predicted."""
    for number, (standing, band) in enumerate(found.pairs):
        one = agreement(around, found.state, standing, band)
        if number in (0, len(found.pairs) - 1) or one.agrees is False:
            yield one
    if found.state.trips:
        bands = _bands(stage, around, found.state)
        yield ended(found.state, bands[around.volts(found.state.name)[0]])
