"""The section of a run's report on a clamp: what it leaks, and what it drops when it conducts."""

from __future__ import annotations

from collections.abc import Iterator

from benchkit.evaluation.clamp_trial import ClampDetail
from benchkit.evaluation.clamp_trial_read import ClampState
from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.spelled import paired, small, spanned
from benchkit.prefixes import spoken
from benchkit.records.record import Record
from benchkit.reports.section import Section, Table

KEY = (
    "Leakage: into the exposed port the right way round, the guarded one open. Drop: how far below "
    "zero the guarded port is, the leads crossed, carried to exactly the current stated. U holds "
    "the true value in 95 % of cases; the band holds 95 % of parts, at the temperature measured."
)


def clamp_section(record: Record, evaluation: Evaluation) -> Section | None:
    """None for a run without a clamp's trial."""
    detail = next((p.detail for p in evaluation.parts if isinstance(p.detail, ClampDetail)), None)
    if detail is None:
        return None
    rows = list(state_rows(detail.before))
    heads = ["Of the clamp", "Measured ± U", "Typical", "Datasheet band", "Case"]
    return Section(
        "clamp", "The clamp, either way round", list(_sentences(record, detail)), "",
        [Table("", heads, rows, KEY)] if rows else [],
    )  # fmt: skip


def _sentences(record: Record, detail: ClampDetail) -> Iterator[str]:
    state, working = detail.before, record.stage.stage
    if state.leakage is not None:
        yield (
            f"With {working.supply_max_V:g} V at the exposed port the right way round, and the "
            "guarded one open, what flows is the clamp's leakage."
        )
    if state.drops:
        *few, last = [f"{drop.target_A:g}" for drop in state.drops]
        amps = f"{', '.join(few)} and {last}" if few else last
        yield (
            f"With the leads crossed {amps} A {'were' if few else 'was'} driven through it: a "
            "clamp conducts when it is reversed, and the guarded port goes below zero by what it "
            "drops."
        )
    if detail.short:
        yield f"The trial is not whole: {detail.short}."


def state_rows(state: ClampState, when: str = "") -> Iterator[list[str]]:
    """Spelled: leakage first, then drops with rising current."""
    if state.leakage is not None:
        found, band = state.leakage, state.leakage.band.leakage
        yield [
            f"leakage at {found.voltage_V:.2f} V{when}",
            paired(found.leakage.value, found.leakage.budget.expanded().U, "A"),
            small(band.nominal, "A"), spanned(band.low, band.high, "A"), f"{found.case_C:.1f} C",
        ]  # fmt: skip
    for drop in state.drops:
        band = drop.band.drop
        yield [
            f"drop at {drop.target_A:g} A{when}",
            paired(drop.drop.value, drop.drop.budget.expanded().U, "V"),
            spoken(band.nominal, "V"), f"{spoken(band.low, 'V')} to {spoken(band.high, 'V')}",
            f"{drop.case_C:.1f} C",
        ]  # fmt: skip
