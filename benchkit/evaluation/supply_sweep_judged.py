"""The rows and the remarks of a supply sweep."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from benchkit.evaluation.findings import Remark
from benchkit.evaluation.part import Part
from benchkit.evaluation.promised import Promised
from benchkit.evaluation.sources import accuracy_of
from benchkit.evaluation.supply_sweep import (
    PORTS,
    Crossing,
    Step,
    SupplySweep,
    crossing,
    crossing_budget,
    drop_components,
    read_supply_sweep,
    seen_components,
)
from benchkit.evaluation.supply_sweep_band import SAME, Onset, SupplyBand, gate_promise, supply_band
from benchkit.evaluation.verdict import Promise, judged, missing, rounded
from benchkit.files.parts import NMosfet, PMosfet
from benchkit.metrology import Budget
from benchkit.prefixes import spoken
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.stage import Stage

UNDRIVEN = 0.5
"""A gate with less of its typical voltage than this is not driven (judgement)."""
GATE_SHARE = 0.05
"""The boards drawn are not all that there can be, and the gate's current is not its printed one
(judgement)."""
APART_V, APART_SHARE = 1e-3, 0.01
"""What noise, and a drop that moved between two readings, may add to what the ports' accuracies
allow (judgement)."""
NEAR_V = 0.005
CERTAIN = 0.999
"""Coverage at which something is remarked on: every board is looked at, and chance has its
share."""


@dataclass(frozen=True)
class SupplyDetail:
    """What the section of the report draws. useful_level_V: the drop's limit, if there is one."""

    sweep: SupplySweep
    band: SupplyBand
    on_from: Crossing | None
    useful_from: Crossing | None
    useful_level_V: float | None
    gate: Promise | None
    """Gate against source at the highest voltage, with its sign; None where it was not read."""
    gate_rating_V: float | None


def judge_supply_sweep(record: Record, promise: Promised) -> Part | None:
    """None for a run whose stage file has no [supply_sweep] table."""
    stage, sweep = promise.stage, read_supply_sweep(record)
    if sweep is None:
        return None
    junction = _junction_C(stage, sweep)
    band = supply_band(stage, junction)
    useful = next(
        (x.max_V for x in stage.file.limits.drop if abs(x.current_A / sweep.current_A - 1) < SAME),
        None,
    )
    level = band.on_level_V
    part = stage.main_part
    detail = SupplyDetail(
        sweep, band,
        crossing(sweep.steps, level) if level is not None and not sweep.short else None,
        crossing(sweep.steps, useful) if level is not None and useful and not sweep.short else None,
        useful if level is not None else None, _gate_promised(promise, sweep, junction),
        part.gate_source_max_V if isinstance(part, PMosfet | NMosfet) else None,
    )  # fmt: skip
    rows = [*_rows(record, stage, detail)]
    remarks = [*_remarks(record, stage, detail)]
    working = stage.file.stage
    untested = [] if sweep.short else [
        f"supply voltages below {sweep.steps[0].target_V:g} V, and any but "
        f"{working.supply_nominal_V:g} V at another current than {sweep.current_A:g} A, or warmer"
    ]  # fmt: skip
    return Part(tuple(rows), tuple(remarks), tuple(untested), detail=detail)


def _gate_promised(promise: Promised, sweep: SupplySweep, junction_C: float) -> Promise | None:
    """At the voltage that the port had."""
    if not sweep.steps or sweep.steps[-1].gate is None:
        return None
    volts = sweep.steps[-1].supply.value
    return gate_promise(promise.stage, promise.drawn, sweep.current_A, volts, junction_C)


def _junction_C(stage: Stage, sweep: SupplySweep) -> float:
    """Of a part that is on, over the whole sweep."""
    if not sweep.steps:
        return stage.file.stage.ambient_nominal_C
    loss = min(step.drop.value * step.current.value for step in sweep.steps)
    case = float(np.mean([step.case_C for step in sweep.steps]))
    return case + stage.junction_to_case_K_per_W * max(loss, 0.0)


def _rows(record: Record, stage: Stage, detail: SupplyDetail) -> Iterator[Measurand]:
    band, limits = detail.band, stage.file.limits
    if band.on_level_V is None:
        yield from _ends(record, stage, detail)
        return
    onsets = (
        ("on_from", band.on_level_V, detail.on_from, band.on_from, limits.on_from_max_V),
        ("useful_from", detail.useful_level_V, detail.useful_from, band.useful_from,
         limits.useful_from_max_V),
    )  # fmt: skip
    for name, level, found, onset, most in onsets:
        if level is not None and (found is not None or most is not None):
            yield _onset_row(record, detail, name, level, found, onset, most)
    yield from _gate(record, stage, detail)


def _onset_row(
    record: Record, detail: SupplyDetail, name: str, level_V: float, found: Crossing | None,
    onset: Onset | None, most: float | None,
) -> Measurand:  # fmt: skip
    sweep = detail.sweep
    condition = f"{sweep.current_A:g} A, drop at most {spoken(level_V, 'V')}"
    if found is None:
        why = sweep.short or (
            f"it drops more at every voltage, up to {sweep.steps[-1].target_V:g} V"
        )
        return missing(name, "V", condition, None, most, why)
    budget, rule = crossing_budget(sweep, record.bench, found), record.stage.limits.rule
    promise = onset.promise if onset is not None else None
    if found.above is not None:
        told = f"{condition}, case at {found.below.case_C:.1f} C"
        return judged(name, "V", told, found.value_V, budget, promise, None, most, rule)
    # Only an upper bound is known: it can show that a limit is met, and never that it is missed.
    told = f"{condition}, at the lowest voltage measured"
    remark = "no more than this: it is so at the lowest voltage measured"
    if promise is not None:
        remark += f"; promised {promise.low:.3g} to {promise.high:.3g} V"
    row = judged(name, "V", told, found.value_V, budget, None, None, most, rule, remark)
    return replace(row, verdict="undecided") if row.verdict == "fail" else row


def _gate(record: Record, stage: Stage, detail: SupplyDetail) -> Iterator[Measurand]:
    """Gate and margin at the highest voltage, where the bench reads the gate."""
    sweep, limits, rating = detail.sweep, stage.file.limits, detail.gate_rating_V
    listed, least = stage.file.supply_sweep, stage.file.limits.gate_margin_min_V
    assert listed is not None
    assert rating is not None
    full = listed.voltages_V[-1]
    top = sweep.steps[-1] if sweep.steps else None
    if top is None or top.target_V != full or top.gate is None:
        if least is not None:
            why = sweep.short or "the gate was not read"
            at = f"below {rating:g} V, {full:g} V supply"
            yield missing("gate_margin", "V", at, least, None, why)
        return
    port_V, value = top.supply.value, top.gate.value
    condition = f"{port_V:.2f} V at the port, {sweep.current_A:g} A"
    budget = Budget(c for c in seen_components(sweep, record.bench, top.gate, 1.0) if c.u != 0.0)
    promise = detail.gate
    yield judged("gate_voltage", "V", condition, value, budget, promise, None, None, limits.rule)
    # Leads drop some: at the full voltage the gate stands that much higher, or less with a Zener.
    carried = max(full - port_V, 0.0)
    margins = (
        sorted(rating - abs(v) - carried for v in (promise.low, promise.high)) if promise else []
    )
    at = f"below {rating:g} V, {full:g} V supply, {sweep.current_A:g} A"
    yield judged(
        "gate_margin", "V", at, rating - abs(value) - carried,
        Budget.linear([(-1.0 if value > 0 else 1.0, budget)]),
        Promise(rating - abs(promise.nominal) - carried, *margins) if promise else None, least,
        None, limits.rule,
        f"carried from {port_V:.2f} V at the port to {full:g} V" if carried > NEAR_V else "",
    )  # fmt: skip


def _ends(record: Record, stage: Stage, detail: SupplyDetail) -> Iterator[Measurand]:
    """A junction is always on: the drop at both ends of the sweep."""
    sweep = detail.sweep
    ends = (sweep.steps[0], sweep.steps[-1]) if len(sweep.steps) > 1 else sweep.steps
    for step in ends:
        if step.carried:
            components = drop_components(sweep, record.bench, step, 1.0)
            yield judged(
                "supply_drop", "V",
                f"{sweep.current_A:g} A, {step.target_V:g} V supply, case at {step.case_C:.1f} C",
                step.drop.value, Budget(c for c in components if c.u != 0.0),
                detail.band.drop_at(step.supply.value), None, None, stage.file.limits.rule,
            )  # fmt: skip


def _remarks(record: Record, stage: Stage, detail: SupplyDetail) -> Iterator[Remark]:
    sweep = detail.sweep
    if sweep.short:
        yield Remark("doubt", f"the supply sweep is not whole: {sweep.short}")
    for text in sweep.trips:
        yield Remark("doubt", f"the guard ended the supply sweep: {text}")
    for text in sweep.ended:
        yield Remark("note", f"supply sweep: {text}")
    if detail.band.on_level_V is None or sweep.short:
        return
    if detail.on_from is None:
        yield Remark("fault", _never_on(detail))
        return
    yield from _of_gate(record, detail)
    yield from _of_ports(record, detail)
    found = detail.on_from
    U = crossing_budget(sweep, record.bench, found).expanded(CERTAIN).U
    yield from _of_tolerance(detail, found, U)
    least, below = stage.file.stage.supply_min_V, found.below.supply.value
    if stage.file.limits.on_from_max_V is None and below > least:
        if found.above is not None and found.value_V > least:
            yield Remark(
                "doubt",
                f"at {sweep.current_A:g} A the stage is on from {_with(found.value_V, U)} V "
                f"only: it is not on over its whole supply range, which begins at {least:g} V",
            )
        else:
            yield Remark(
                "doubt",
                f"the stage was measured to be on from {below:.3g} V only, and its supply range "
                f"begins at {least:g} V: supply_sweep.voltages_V needs a voltage at or below that",
            )


def _of_gate(record: Record, detail: SupplyDetail) -> Iterator[Remark]:
    """A gate that is driven otherwise than in any board within tolerance, at whatever voltage:
    what drives or limits it is not as it should be, or its leads are off."""
    sweep, band = detail.sweep, detail.band
    for step in reversed(sweep.steps):
        if step.gate is None or not step.carried:
            continue
        least, most = (
            float(np.interp(step.supply.value, band.volts, of))
            for of in (band.gate_least_V, band.gate_most_V)
        )
        if math.isnan(least):
            continue
        components = seen_components(sweep, record.bench, step.gate, 1.0)
        U = Budget(c for c in components if c.u != 0.0).expanded(CERTAIN).U
        beyond = U + GATE_SHARE * max(abs(least), abs(most))
        if not least - beyond <= step.gate.value <= most + beyond:
            yield Remark(
                "doubt",
                f"at {step.target_V:g} V supply the gate is at {spoken(step.gate.value, 'V')} from "
                f"the source, where the datasheets' tolerances allow {least:.3g} to {most:.3g} V: "
                "suspect what limits or drives it, or the leads of gate_voltage",
            )
            return


def _of_ports(record: Record, detail: SupplyDetail) -> Iterator[Remark]:
    """The drop against the ports' voltages: three channels that see two of one thing."""
    for step in detail.sweep.steps:
        limits = [accuracy_of(record.bench, point, step.supply.range) for point in PORTS]
        volts = abs(step.supply.value)
        allowed = sum(a.gain_limit() * volts + a.offset_limit() for a in limits)
        allowed += APART_V + APART_SHARE * abs(step.drop.value)
        if abs(step.contradicts_V) > allowed:
            yield Remark(
                "doubt",
                f"at {step.target_V:g} V supply the drop read and the difference of the ports' "
                f"voltages are {spoken(abs(step.contradicts_V), 'V')} apart, and the meter allows "
                f"{spoken(allowed, 'V', 2)}: a measuring lead was off",
            )
            return


def _never_on(detail: SupplyDetail) -> str:
    top: Step = detail.sweep.steps[-1]
    told = (
        f"at {top.target_V:g} V supply the stage is not on: at {detail.sweep.current_A:g} A it "
        f"drops {spoken(top.drop.value, 'V')}, where {spoken(detail.band.on_level_V or 0.0, 'V')} "
        "lie half way to its body diode"
    )
    if not top.carried:
        told = f"at {top.target_V:g} V supply the stage does not carry {detail.sweep.current_A:g} A"
    typical = detail.gate
    if top.gate is None or typical is None:
        return told
    driven = abs(top.gate.value) >= UNDRIVEN * abs(typical.nominal)
    gate = f"its gate is at {spoken(top.gate.value, 'V')} from the source"
    return f"{told}; {gate}, " + (
        "which should do: suspect another part, or a dry joint" if driven
        else f"where a typical board has {spoken(typical.nominal, 'V')}: it is not driven"
    )  # fmt: skip


def _of_tolerance(detail: SupplyDetail, found: Crossing, U: float) -> Iterator[Remark]:
    """Is this the part that the stage file says?"""
    onset, at = detail.band.on_from, f"{_with(found.value_V, U)} V"
    if onset is None:
        return
    if found.above is not None and found.value_V - U > onset.most_V:
        yield Remark(
            "doubt",
            f"the stage is on from {at}, higher than the most that the datasheets' tolerances "
            f"allow ({onset.most_V:.3g} V): suspect another part with a higher threshold, a gate "
            "that is not fully driven, or a dry joint",
        )
    elif found.value_V + U < onset.least_V:
        yield Remark(
            "doubt",
            f"the stage is on from {at} already, lower than the least that the datasheets' "
            f"tolerances allow ({onset.least_V:.3g} V): suspect another part, or something "
            "conducting across it",
        )


def _with(value: float, U: float) -> str:
    return " ± ".join(rounded(value, U))
