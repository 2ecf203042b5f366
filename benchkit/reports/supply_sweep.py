"""The section of a run's report on the supply sweep."""

from __future__ import annotations

import math
from collections.abc import Iterator

from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.spelled import minus
from benchkit.evaluation.supply_sweep import Crossing, Step, drop_components, is_on
from benchkit.evaluation.supply_sweep_judged import SupplyDetail
from benchkit.evaluation.verdict import rounded
from benchkit.metrology import Budget
from benchkit.prefixes import spoken
from benchkit.records.record import Record
from benchkit.reports.section import Section, Table
from benchkit.reports.supply_sweep_figure import supply_sweep_figure
from benchkit.reports.words import NONE

KEY = (
    "Supply: at the port that feeds the stage, as measured. U holds the true drop in 95 % of "
    "cases; the band holds 95 % of parts, at the voltage measured."
)


def supply_sweep_section(record: Record, evaluation: Evaluation) -> Section | None:
    """None for a run whose stage file has no [supply_sweep] table."""
    detail = next((p.detail for p in evaluation.parts if isinstance(p.detail, SupplyDetail)), None)
    if detail is None:
        return None
    steps = detail.sweep.steps
    return Section(
        "supply-sweep", "Against supply voltage", list(_sentences(detail)),
        supply_sweep_figure(detail, record.stage),
        [_table(record, detail)] if steps else [],
    )  # fmt: skip


def _sentences(detail: SupplyDetail) -> Iterator[str]:
    sweep, band = detail.sweep, detail.band
    if sweep.steps:
        high, low = sweep.steps[-1].target_V, sweep.steps[0].target_V
        yield (
            f"At {sweep.current_A:g} A the supply voltage was lowered in steps from {high:g} V to "
            f"{low:g} V, with everything off between them."
        )
    if band.on_level_V is not None:
        yield (
            f"The stage counts as on while it drops at most {spoken(band.on_level_V, 'V')}: half "
            "way, in the logarithm, between a typical board that is fully on at the highest "
            "voltage and a typical body diode."
        )
        if detail.on_from is not None:
            yield f"It is on {_from(detail.on_from)}."
        elif not sweep.short:
            yield f"It was not on at {sweep.steps[-1].target_V:g} V."
        if detail.useful_from is not None:
            most = spoken(detail.useful_from.level_V, "V")
            yield f"Its drop is within the limit of {most} {_from(detail.useful_from)}."
    else:
        yield "Its part has no gate, and conducts at any supply voltage."
    if sweep.short:
        yield f"The sweep is not whole: {sweep.short}."
    for text in (*sweep.ended, *(f"the guard ended it: {trip}" for trip in sweep.trips)):
        yield f"{text[:1].upper()}{text[1:]}."


def _from(found: Crossing) -> str:
    if found.above is None:
        return f"at {found.value_V:.3g} V, the lowest voltage measured, and so from there or lower"
    high, low = found.below.supply.value, found.above.supply.value
    at, _ = rounded(found.value_V, 0.5 * (high - low))
    return f"from about {at} V: not yet at {low:.3g} V, already at {high:.3g} V"


def _table(record: Record, detail: SupplyDetail) -> Table:
    heads = ["Supply", "Drop ± U", "Typical", "Datasheet band"]
    level, gated = detail.band.on_level_V, any(step.gate for step in detail.sweep.steps)
    heads += ["Gate to source"] * gated + ["On"] * (level is not None)
    return Table("", heads, [list(_row(record, detail, s)) for s in detail.sweep.steps[::-1]], KEY)


def _row(record: Record, detail: SupplyDetail, step: Step) -> Iterator[str]:
    yield f"{step.supply.value:.3f} V"
    if step.carried:
        components = drop_components(detail.sweep, record.bench, step, 1.0)
        U = Budget(c for c in components if c.u != 0.0).expanded().U
        value, spread = rounded(1e3 * step.drop.value, 1e3 * U)
        yield f"{value} ± {spread} mV"
    else:
        yield f"carries {spoken(max(step.current.value, 0.0), 'A')} only"
    promise = detail.band.drop_at(step.supply.value)
    if promise is None or not math.isfinite(promise.nominal):
        yield from (NONE, NONE)
    else:
        yield f"{1e3 * promise.nominal:.3g} mV"
        yield f"{1e3 * promise.low:.3g} to {1e3 * promise.high:.3g} mV"
    if any(each.gate for each in detail.sweep.steps):
        yield NONE if step.gate is None else f"{minus(f'{step.gate.value:.3f}')} V"
    if detail.band.on_level_V is not None:
        yield "yes" if is_on(step, detail.band.on_level_V) else "no"
