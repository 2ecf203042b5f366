"""Judges a run from its record alone: `verify`, `report` and `audit` all call this."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass

import numpy as np

from benchkit.evaluation.battery_trial_judged import judge_battery_trial
from benchkit.evaluation.clamp_trial import judge_clamp
from benchkit.evaluation.findings import gravest_first, of_band, remarks_of
from benchkit.evaluation.fused_trial import judge_fused
from benchkit.evaluation.hottest import Hottest, hottest
from benchkit.evaluation.part import Part
from benchkit.evaluation.promised import Promised, promised
from benchkit.evaluation.reverse import Trial, read_trial
from benchkit.evaluation.reverse_band import ReverseBand, reverse_bands
from benchkit.evaluation.reverse_judged import reverse_remarks, reverse_rows, strongest, untested
from benchkit.evaluation.scenarios_found import scenarios_found
from benchkit.evaluation.soak import Soak, read_soak
from benchkit.evaluation.supply_sweep_judged import judge_supply_sweep
from benchkit.evaluation.sweep import DropAt, Sweep, drop_at, junctions_C, read_sweep
from benchkit.evaluation.verdict import Promise, judged, missing, summary
from benchkit.prediction.ratings import Rating
from benchkit.records.record import Record
from benchkit.records.result import Measurand, Result
from benchkit.stage import Stage


@dataclass(frozen=True)
class Evaluation:
    """A result, and what the report draws beside it."""

    result: Result
    stage: Stage
    sweep: Sweep | None
    drops: list[DropAt]
    soak: Soak | None
    hottest: Hottest | None
    trial: Trial | None = None
    bands: tuple[ReverseBand, ...] = ()
    """What the datasheets promise at each rung of the trial, and at its last state."""
    parts: tuple[Part, ...] = ()


PARTS: tuple[Callable[[Record, Promised], Part | None], ...] = (
    judge_supply_sweep, judge_clamp, judge_fused, judge_battery_trial,
)  # fmt: skip
"""The further parts of a run, in the order of their rows; each gives None for a run whose stage
file does not ask for it."""


def evaluate(record: Record, serial: str) -> Evaluation:
    """Work out every figure and verdict of a run."""
    promise = promised(record)
    stage = promise.stage
    stopped = record.said("stopped")
    sweep = read_sweep(record)
    drops = [drop_at(sweep, record.bench, t) for t in sweep.targets] if sweep else []
    soak = read_soak(record, sweep)
    usable = soak is not None and soak.heating.usable
    extreme = hottest(stage, soak, drops[-1]) if soak is not None and usable and drops else None
    trial = read_trial(record, stage, sweep)
    bands = _bands(stage, trial, record.bench.bench.bleeder_ohm)
    last = strongest(bands, trial)
    parts = tuple(part for judge in PARTS if (part := judge(record, promise)) is not None)
    blown = "of the fuse that was blown afterwards" if record.said("new-fuse") else ""
    forward_drops = list(_drops(promise, drops, blown))
    measurands = [
        *forward_drops,
        *_thermal(promise, soak if usable else None, extreme),
        *reverse_rows(stage, trial, last),
        *(row for part in parts for row in part.rows),
    ]
    told = remarks_of(record, stage, promise.scenarios, sweep, drops, soak, extreme)
    # A part that was not what it should be before the trial is not asked whether that changed it:
    # how its drop moves with temperature is not known.
    sound = not any(remark.weight == "fault" for remark in told) and not of_band(stage, drops)
    remarks = gravest_first([
        *told,
        *reverse_remarks(record, stage, trial, bands, sound=sound),
        *(remark for part in parts for remark in part.remarks),
    ])  # fmt: skip
    verdict, why = summary(measurands, remarks, stopped)
    result = Result(
        serial,
        record.stage.stage.name,
        record.stage.stage.topology,
        verdict,
        why,
        measurands,
        [remark.text for remark in remarks],
        [*_not_tested(record, stage, trial), *(text for part in parts for text in part.untested)],
        [{"scenario": s.name, **_rating(r)} for s in promise.scenarios for r in s.ratings],
        [asdict(one) for one in scenarios_found(promise, forward_drops, trial, last, parts)],
    )
    return Evaluation(result, stage, sweep, drops, soak, extreme, trial, bands, parts)


def _bands(stage: Stage, trial: Trial | None, bleeder_ohm: float | None) -> tuple[ReverseBand, ...]:
    if trial is None:
        return ()
    last = [trial.last] if trial.last is not None else []
    return tuple(reverse_bands(stage, [*trial.rungs, *last], bleeder_ohm))


def _drops(promise: Promised, drops: list[DropAt], remark: str) -> Iterator[Measurand]:
    """Drop at every current that was reached, and every limit that was not."""
    stage = promise.stage
    limits = {limit.current_A: limit.max_V for limit in stage.file.limits.drop}
    supply = stage.file.stage.supply_nominal_V
    if drops:
        amps = np.array([d.current_A for d in drops])
        junction = junctions_C(drops, _lag(stage))
        for drop, band in zip(drops, promise.drops(amps, junction), strict=True):
            yield judged(
                "drop",
                "V",
                f"{drop.current_A:g} A, {supply:g} V supply, case at {drop.case_C:.1f} C",
                drop.drop_V,
                drop.budget,
                band,
                None,
                limits.get(drop.current_A),
                stage.file.limits.rule,
                remark,
            )
    reached = {d.current_A for d in drops}
    for current, most in limits.items():
        if current not in reached:
            yield missing(
                "drop",
                "V",
                f"{current:g} A, {supply:g} V supply",
                None,
                most,
                "this current was not reached",
            )


def _lag(stage: Stage) -> float:
    return stage.junction_to_case_K_per_W


def _thermal(promise: Promised, soak: Soak | None, extreme: Hottest | None) -> Iterator[Measurand]:
    file = promise.stage.file
    rule, working = file.limits.rule, file.stage
    resistance = promise.thermal_resistance()
    end = (
        f"{working.current_max_A:g} A at {working.ambient_max_C:g} C ambient, "
        f"{working.supply_min_V:g} V supply"
    )
    margin = file.limits.junction_margin_min_K
    if soak is None or extreme is None:
        if file.limits.case_max_C is not None:
            yield missing(
                "case_hottest", "C", end, None, file.limits.case_max_C, "there is no usable soak"
            )
        if margin is not None:
            yield missing("junction_margin", "K", end, margin, None, "there is no usable soak")
        return
    at = f"{soak.current_A:g} A, {soak.late_loss_W:.4g} W"
    loss = soak.late_loss_W
    warm = np.array([soak.warm_case_C + _lag(promise.stage) * loss])
    yield judged(
        "warm_drop",
        "V",
        f"{soak.current_A:g} A, {working.supply_nominal_V:g} V supply, "
        f"case at {soak.warm_case_C:.1f} C",
        soak.warm_drop_V,
        soak.warm_drop_budget,
        promise.drops(np.array([soak.current_A]), warm)[0],
        None,
        next((x.max_V for x in file.limits.drop if x.current_A == soak.current_A), None),
        rule,
    )
    yield judged(
        "case_rise",
        "K",
        f"final, {at}",
        soak.heating.final_rise_K,
        soak.heating.final_rise_budget,
        Promise(resistance.nominal * loss, resistance.low * loss, resistance.high * loss),
        None,
        None,
        rule,
    )
    yield judged(
        "thermal_resistance",
        "K/W",
        f"case to ambient, {at}",
        soak.resistance_K_per_W,
        soak.resistance_budget,
        resistance,
        None,
        None,
        rule,
    )
    yield judged(
        "case_hottest",
        "C",
        end,
        extreme.case_C,
        extreme.case_budget,
        promise.case_hottest,
        None,
        file.limits.case_max_C,
        rule,
        remark=f"extrapolated from {at} to {extreme.loss_W:.3g} W",
    )
    top = promise.stage.main_part.junction_max_C
    yield judged(
        "junction_margin",
        "K",
        f"below {top:g} C, {end}",
        top - extreme.junction_C,
        extreme.junction_budget,
        promise.junction_margin,
        margin,
        None,
        rule,
        remark=f"junction at {extreme.junction_C:.1f} C",
    )


def _rating(one: Rating) -> dict[str, object]:
    """JSON-ready: null for a junction that runs away."""
    values = asdict(one)
    for key in ("value", "margin"):
        if not math.isfinite(values[key]):
            values[key] = None
    return values


def _not_tested(record: Record, stage: Stage, trial: Trial | None) -> list[str]:
    """What a signature on this run does not cover, beside what each part says of itself."""
    file = record.stage
    told = []
    crossed = file.battery_trial is not None and any(
        name.startswith("reversed") for name in file.battery_trial.scenarios
    )
    if trial is not None or (file.reverse is None and not crossed):
        told += untested(trial, file.reverse.current_limit_A if file.reverse else 0.0)
    if file.battery_trial is None:
        told.append(
            "a battery at the exposed port, either way round, and what the stage feeds back"
        )
    if file.supply_sweep is None:
        told.append(
            f"supply voltages other than {file.stage.supply_nominal_V:g} V (what is said of others "
            "rests on the datasheets)"
        )
    if "fuse" in stage.names and file.fused_trial is None:
        told.append(f"whether {stage.names['fuse']} opens in time: it was not blown")
    if file.soak is not None:
        told.append(
            "the drop when warm at currents other than the soak's: the sweep is short, and its "
            "drops are those of a part near room temperature"
        )
    else:
        told.append("heat: the stage file has no [soak]")
    return [*told, *record.said("soak-skipped")]
