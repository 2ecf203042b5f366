"""The report of one run."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import groupby

from benchkit.evaluation.evaluate import Evaluation
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.reports.battery_trial import battery_trial_section
from benchkit.reports.budgets import budget_tables, drop_tables
from benchkit.reports.clamp_trial import clamp_section
from benchkit.reports.figures import board_figure, thinned
from benchkit.reports.front import front_page
from benchkit.reports.fused_trial import fused_section
from benchkit.reports.law import FittedLaw, fitted_law
from benchkit.reports.pages import render
from benchkit.reports.reverse import reverse_section
from benchkit.reports.scenarios import scenarios_section
from benchkit.reports.section import Section
from benchkit.reports.supply_sweep import supply_sweep_section
from benchkit.reports.words import (
    Figures,
    Strip,
    figures_of,
    named,
    place_in_band,
    rescaled,
    shown_in,
    strip_of,
    unit_of,
)

NOTABLE = {
    "found-on": "Output found on",
    "trip": "Trip",
    "stopped": "Stopped",
    "not-confirmed-off": "Outputs not confirmed off",
    "sweep-cut": "Sweep cut short",
    "soak-skipped": "Soak skipped",
    "reverse-conducts": "Conducts in reverse",
    "reverse-skipped": "Trial in reverse skipped",
    "left-reversed": "Leads left crossed",
    "harness": "Leads",
    "clamp-cut": "Clamp trial cut short",
    "fuse-stayed": "The fuse did not open",
    "new-fuse": "New fuse",
    "not-cooled": "Still warm",
    "supply-sweep-ends": "Supply sweep ended",
    "battery-conducts": "Conducts at a battery",
    "battery-skipped": "Battery trial skipped",
    "load": "Load",
}
SECTIONS: tuple[Callable[[Record, Evaluation], Section | None], ...] = (
    supply_sweep_section, clamp_section, fused_section, battery_trial_section,
    scenarios_section,
)  # fmt: skip
"""Of the further parts of a run, in order; each gives None for a run that has no such part."""
ANSWERS = {
    "pass": "Yes, for what was tested here.",
    "fail": "No: the board does not meet what it must.",
    "undecided": "Not on this run: not everything could be decided.",
}


@dataclass(frozen=True)
class Row:
    """A measurand as the tables show it."""

    condition: str
    figures: Figures
    verdict: str | None
    place: str
    strip: Strip | None
    disagrees: bool
    chance: str
    """That the true value meets the limit; "" where it is next to certain."""
    remark: str


@dataclass(frozen=True)
class Group:
    """Rows of one quantity; the title names its unit and what their conditions share."""

    title: str
    rows: list[Row]


@dataclass(frozen=True)
class Instrument:
    """One line of the instruments' table."""

    role: str
    identity: str
    dialect: str
    resource: str
    due: str
    overdue: bool


def board_report(record: Record, evaluation: Evaluation, manifest: Mapping[str, object]) -> str:
    """One run as self-contained HTML, the same bytes for the same record.

    manifest: ``versions`` (by package), ``instruments`` (by role: identity, dialect,
    calibration_due, resource), ``operator``, ``clock``, ``started``, ``ended``, ``status``,
    ``bench``, ``schema``; what is missing is shown as not recorded.
    """
    from markupsafe import Markup

    result, sweep, soak = evaluation.result, evaluation.sweep, evaluation.soak
    law = None
    if sweep is not None:
        law = fitted_law(record, evaluation.stage, sweep)
    instruments = list(_instruments(record, manifest))
    overdue = [i for i in instruments if i.overdue]
    simulated = record.bench.is_simulated or manifest.get("clock") == "simulated"
    not_off = record.said("not-confirmed-off")
    reverse = reverse_section(record, evaluation)
    crossed = record.said("left-reversed")
    # What was not tested and how the leads are have their own places: not a second time among
    # reasons and remarks.
    elsewhere = {*result.not_tested, *crossed}
    why = [text for text in result.why if text not in elsewhere]
    told = {*why, *elsewhere}
    front = front_page(
        result.measurands, why, [t for t in result.findings if t not in told],
        2 * bool(not_off) + 2 * bool(crossed) + simulated + bool(overdue), result.not_tested,
    )  # fmt: skip
    return render(
        "board.j2",
        result=result, record=record, manifest=manifest, answer=ANSWERS[result.verdict],
        front=front, rows=_groups(front.rows),
        left_out=len(result.measurands) - len(front.rows),
        groups=_groups(result.measurands),
        rule=record.stage.limits.rule, has_limits=any(m.verdict for m in result.measurands),
        figure=Markup(board_figure(evaluation, law)),
        law=law.sentences if isinstance(law, FittedLaw) else [law] if law else [],
        heating=_heating(evaluation), no_sweep=sweep is None, no_soak=soak is None,
        budgets=budget_tables(result.measurands), drop_budgets=drop_tables(result.measurands),
        instruments=instruments, overdue=overdue,
        events=_events(record), not_off=not_off, crossed=crossed,
        reverse=reverse, ladder=Markup(reverse.figure) if reverse is not None else "",
        tried=_tried(record),
        sections=[s for draw in SECTIONS if (s := draw(record, evaluation)) is not None],
        simulated=simulated,
        conditions=_conditions(record, evaluation), versions=_versions(manifest),
        promises=evaluation.stage.notes,
    )  # fmt: skip


def _tried(record: Record) -> str:
    """What kinds of trial the stage file asked for, in words."""
    file = record.stage
    words = [
        "forward drop",
        *(["heat"] if file.soak else []),
        *(["supply voltage"] if file.supply_sweep else []),
        *(["reversed supply"] if file.reverse else []),
        *(["blown fuse"] if file.fused_trial else []),
        *(["battery"] if file.battery_trial else []),
    ]
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"


def _groups(rows: Sequence[Measurand]) -> list[Group]:
    groups = []
    for (name, unit), group in groupby(rows, key=lambda row: (row.name, row.unit)):
        found = list(group)
        factor, shown = shown_in(unit, found)
        members = [rescaled(row, factor, shown) for row in found]
        parts = [row.condition.split(", ") for row in members]
        shared = [p for p in parts[0] if len(parts) > 1 and all(p in other for other in parts)]
        title = ", ".join([f"{named(name)} ({unit_of(shown)})", *shared])
        groups.append(Group(title, [
            _row(row, ", ".join(p for p in own if p not in shared))
            for row, own in zip(members, parts, strict=True)
        ]))  # fmt: skip
    return groups


def _row(row: Measurand, condition: str) -> Row:
    chance = row.conformity
    return Row(
        condition, figures_of(row), row.verdict, place_in_band(row), strip_of(row),
        row.en is not None and row.en > 1,
        f"{100 * chance:.1f} %" if chance is not None and 0.001 <= chance <= 0.999 else "",
        row.remark,
    )  # fmt: skip


def _heating(evaluation: Evaluation) -> list[str]:
    soak = evaluation.soak
    if soak is None:
        return []
    heating = soak.heating
    told = []
    if heating.usable:
        U = heating.final_rise_budget.expanded().U
        told.append(
            f"The case settles {heating.final_rise_K:.2f} ± {U:.2f} K above ambient at "
            f"{soak.late_loss_W:.3g} W of loss; {heating.time_s[-1]:.0f} s were measured."
        )
        if heating.taus:
            constants = " and ".join(f"{tau:.0f} s" for tau in heating.taus)
            told.append(f"Time constants that describe it best: {constants}.")
        if heating.one is not None and heating.two is not None and not heating.one_and_two_agree:
            told.append(
                "One and two exponentials end further apart than the uncertainty: lean on the "
                "band, not on a single time constant."
            )
    else:
        told.append(f"The soak does not say where the rise ends: {heating.why}.")
    stride = thinned(heating.time_s.size)
    if stride > 1:
        told.append(f"One in {stride} of {heating.time_s.size} samples is drawn.")
    return told


def _instruments(record: Record, manifest: Mapping[str, object]) -> Iterator[Instrument]:
    """As they answered, or as the bench file declares them where nothing was recorded."""
    answered = manifest.get("instruments")
    answered = answered if isinstance(answered, Mapping) else {}
    day = str(manifest.get("started") or "")[:10]
    for role, declared in record.bench.instruments.items():
        found = answered.get(role)
        found = found if isinstance(found, Mapping) else {}
        due = str(found.get("calibration_due") or declared.calibration_due)
        yield Instrument(
            role, str(found.get("identity") or f"{declared.identity} (as the bench file says)"),
            str(found.get("dialect") or declared.dialect),
            str(found.get("resource") or declared.resource), due, bool(day) and due < day,
        )  # fmt: skip


def _events(record: Record) -> list[tuple[str, str, str]]:
    told = []
    for event in record.events:
        kind = str(event.get("kind"))
        if kind in NOTABLE:
            time_s = event.get("time_s")
            at = f"{time_s:.1f} s" if isinstance(time_s, int | float) else ""
            told.append((at, NOTABLE[kind], str(event.get("text", ""))))
    return told


def _conditions(record: Record, evaluation: Evaluation) -> list[tuple[str, str]]:
    working, sweep, soak = record.stage.stage, evaluation.sweep, evaluation.soak
    told = [
        ("Supply", f"{working.supply_nominal_V:g} V"),
        ("Limits are judged for", f"{working.current_max_A:g} A and {working.ambient_max_C:g} °C"),
    ]
    if sweep is not None:
        told += [
            ("Ambient at the start", f"{sweep.ambient_C:.1f} °C"),
            ("Currents reached",
             f"{sweep.targets[0]:g} to {sweep.targets[-1]:g} A, {len(sweep.targets)} of "
             f"{len(record.stage.sweep.currents_A)}"),
            ("Case during the sweep", f"{sweep.case_C.min():.1f} to {sweep.case_C.max():.1f} °C"),
        ]  # fmt: skip
    if soak is not None:
        told.append(("Soak", f"{soak.current_A:g} A, {soak.late_loss_W:.3g} W"))
    shunt = record.bench.points["exposed_current"]
    told.append(
        ("Current read across", f"{shunt.shunt_ohm:g} Ω ± {shunt.shunt_tolerance_percent:g} %")
    )
    return told


def _versions(manifest: Mapping[str, object]) -> str:
    versions = manifest.get("versions")
    if not isinstance(versions, Mapping) or not versions:
        return "not recorded"
    return ", ".join(f"{name} {version}" for name, version in versions.items())
