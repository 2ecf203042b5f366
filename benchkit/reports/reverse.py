"""The section of a run's report on the trial in the wrong direction."""

from __future__ import annotations

from dataclasses import dataclass

from benchkit.evaluation.drop_change import DropChange
from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.reverse import Figure, Rung, Trial
from benchkit.evaluation.reverse_band import ReverseBand
from benchkit.evaluation.spelled import minus, paired, small, spanned
from benchkit.evaluation.verdict import rounded
from benchkit.records.record import Record
from benchkit.reports.reverse_figure import reverse_figure


@dataclass(frozen=True)
class RungRow:
    """One line of the ladder, spelled: measured with U, the typical part, the band."""

    voltage: str
    leakage: tuple[str, str, str]
    guarded: tuple[str, str, str]


@dataclass(frozen=True)
class ChangeRow:
    """Drop at one current in millivolts, before and after."""

    current: str
    before: str
    after: str
    change: str
    U: str
    warmer: str


@dataclass(frozen=True)
class Section:
    """``figure`` is SVG, and all the rest is text."""

    sentences: list[str]
    figure: str
    rungs: list[RungRow]
    changes: list[ChangeRow]


def reverse_section(record: Record, evaluation: Evaluation) -> Section | None:
    """None for a run whose stage file has no [reverse] table."""
    trial = evaluation.trial
    if trial is None:
        return None
    rungs = [*trial.rungs, *([trial.last] if _dwelt(trial) and trial.last is not None else [])]
    pairs = list(zip(rungs, evaluation.bands, strict=False))
    return Section(
        _sentences(record, trial),
        reverse_figure(trial, evaluation.bands[: len(trial.rungs)], record.stage.limits),
        [_rung(trial, *pair) for pair in pairs],
        [_change(change) for change in trial.changes],
    )


def _dwelt(trial: Trial) -> bool:
    return trial.last is not None and trial.last is not trial.rungs[-1]


def _sentences(record: Record, trial: Trial) -> list[str]:
    settings = record.stage.reverse
    assert settings is not None
    told = []
    if trial.rungs:
        *low, high = [f"{rung.target_V:g}" for rung in trial.rungs]
        steps = f"{', '.join(low)} and {high}" if low else high
        stay = (
            f", and stayed at {trial.full_V:g} V for {trial.dwell_s:.3g} s" if _dwelt(trial) else ""
        )
        told.append(
            "With the supply's leads crossed at the exposed port and the load drawing nothing, "
            f"the voltage was raised to {steps} V behind a current limit of "
            f"{settings.current_limit_A:g} A{stay}."
        )
    if trial.short:
        told.append(f"The trial is not whole: {trial.short}.")
    told += [f"The guard ended it: {text}." for text in trial.trips]
    told += [f"{text[:1].upper()}{text[1:]}." for text in record.said("reverse-conducts")]
    return told


def _rung(trial: Trial, rung: Rung, band: ReverseBand) -> RungRow:
    held = f", after {trial.dwell_s:.3g} s" if rung is trial.last and _dwelt(trial) else ""
    return RungRow(
        f"{rung.voltage_V:.2f} V{held}",
        (
            _pair(rung.leakage, "A"), small(band.leakage.nominal, "A"),
            spanned(band.leakage.low, band.leakage.high, "A"),
        ),
        (
            _pair(rung.guarded, "V"), small(band.guarded.nominal, "V"),
            spanned(band.guarded.low, band.guarded.high, "V"),
        ),
    )  # fmt: skip


def _pair(figure: Figure, unit: str) -> str:
    return paired(figure.value, figure.budget.expanded().U, unit)


def _change(change: DropChange) -> ChangeRow:
    value, spread = rounded(1e3 * change.change_V, 1e3 * change.budget.expanded().U)
    places = len(value.partition(".")[2])
    return ChangeRow(
        f"{change.current_A:g} A", f"{1e3 * change.before_V:.{places}f}",
        f"{1e3 * change.after_V:.{places}f}", minus(value), spread,
        f"{minus(f'{change.after_C - change.before_C:.1f}')} K",
    )  # fmt: skip
