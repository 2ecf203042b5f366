"""The rows and the remarks of a trial in reverse."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

from benchkit.evaluation.findings import Remark
from benchkit.evaluation.reverse import Figure, Trial
from benchkit.evaluation.reverse_band import ReverseBand
from benchkit.evaluation.verdict import judged, missing
from benchkit.prefixes import spoken
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.stage import Stage

FAR = 10.0
"""A leakage beyond the band by this much is no longer one of a part that is a little off."""
PLAINLY = 1.05
"""The same of the guarded port, which no fault takes further down than a leaky sound part can."""
BLIND = 0.5
"""A sound part may take the guarded port to this share of the voltage applied: a bad one can hardly
do more, and it is not the part that is seen there (judgement)."""
FLOWS_A = 1e-3
"""Below this nothing is said to conduct."""
UNSAID_A = 10e-6
"""What a part whose sheet gives no leakage may leak without remark (judgement)."""
CERTAIN = 0.999
"""Coverage at which a leak or a change of drop is remarked on: several are looked at of every
board, and chance has its share."""
_OF_THE_BENCH = re.compile(
    r"time |supply_voltage |the supply's output |case gives|\w+ gives no usable reading \(invalid\)"
)


def reverse_rows(
    stage: Stage, trial: Trial | None, band: ReverseBand | None
) -> Iterator[Measurand]:
    """Leakage, guarded port, and the change of the drop; band: at ``trial.last``."""
    if trial is None:
        return
    limits, supply = stage.file.limits, stage.file.stage.supply_nominal_V
    at = f"{trial.full_V:g} V reversed"
    if trial.last is None or band is None:
        for name, unit, most in (
            ("reverse_leakage", "A", limits.leakage_max_A),
            ("reverse_guarded", "V", limits.guarded_reverse_max_V),
        ):
            if most is not None:
                why = f"the trial in reverse is not whole: {trial.short}"
                yield missing(name, unit, at, None, most, why)
    else:
        dwelt = [f"after {trial.dwell_s:.0f} s"] if trial.dwell_s else []
        condition = ", ".join([at, *dwelt, f"case at {trial.last.case_C:.1f} C"])
        leakage, guarded = trial.last.leakage, trial.last.guarded
        yield judged(
            "reverse_leakage", "A", condition, leakage.value, leakage.budget, band.leakage, None,
            limits.leakage_max_A, limits.rule, _seen(leakage, band, limits.leakage_max_A),
        )  # fmt: skip
        yield judged(
            "reverse_guarded", "V", condition, guarded.value, guarded.budget, band.guarded, None,
            limits.guarded_reverse_max_V, limits.rule,
        )  # fmt: skip
    for change in trial.changes:
        yield judged(
            "drop_change", "V",
            f"{change.current_A:g} A, {supply:g} V supply, after the trial in reverse",
            change.change_V, change.budget, None, None, None, limits.rule,
        )  # fmt: skip


def _seen(leakage: Figure, band: ReverseBand, most: float | None) -> str:
    """What the bench can see of so small a current, where that is not enough."""
    U, told = leakage.budget.expanded().U, []
    if abs(leakage.value) <= U:
        told.append(f"not seen: below {spoken(max(leakage.value, 0.0) + U, 'A', 2)}")
    if most is not None and most <= U:
        told.append("the limit is less than this bench can see")
    elif band.leakage.high <= U:
        told.append("the promise is less than this bench can see")
    return "; ".join(told)


def reverse_remarks(
    record: Record,
    stage: Stage,
    trial: Trial | None,
    bands: Sequence[ReverseBand],
    *,
    sound: bool = True,
) -> Iterator[Remark]:
    """What a trial in reverse means for the board, the gravest first among equals.

    bands: of its rungs, and then of ``trial.last`` where there is one. sound: whether the sweep
    found no fault.
    """
    told = list(_blocking(record, stage, trial, bands)) if trial is not None else []
    yield from told
    for text in record.said("left-reversed"):
        yield Remark("note", text)
    if trial is None:
        return
    if sound:
        yield from _changed(trial)
    if trial.short and not told:
        yield Remark("doubt", f"the trial in reverse is not whole: {trial.short}")
    for name, zero, taken in (
        ("exposed_current", trial.current_zero, trial.rungs),
        ("guarded_voltage", trial.guarded_zero, trial.rungs),
    ):
        if taken and not zero.used:
            yield Remark(
                "note",
                f"no zero of {name} could be taken off in the trial in reverse: it was not taken "
                "on the trial's range with the leads crossed, or reads more than an offset of the "
                "meter can be; the declared offset stays in the uncertainty",
            )


def _blocking(
    record: Record, stage: Stage, trial: Trial, bands: Sequence[ReverseBand]
) -> Iterator[Remark]:
    for text in record.said("reverse-conducts"):
        yield Remark("fault", f"the stage does not block in reverse: {text}")
    for text in trial.trips:
        if _OF_THE_BENCH.match(text):
            yield Remark("doubt", f"the bench, not the stage, ended the trial in reverse: {text}")
        else:
            yield Remark(
                "fault", f"the stage does not block in reverse: the guard ended the trial, {text}"
            )
    if bands:
        yield from _of_leakage(stage, trial, bands, record.bench.bench.bleeder_ohm)


@dataclass(frozen=True)
class _Look:
    """Something measured in the trial, to be held against what the sheets allow there."""

    at: str
    figure: Figure
    U: float
    band: ReverseBand


def _looks(
    trial: Trial, bands: Sequence[ReverseBand], what: Literal["leakage", "guarded"]
) -> Iterator[_Look]:
    """The end of the trial, then the peak of every rung and of the dwell: a part that gave way for
    a moment did not block."""
    rungs = [*trial.rungs, *([trial.last] if trial.last is not None else [])]
    if trial.last is not None:
        figure: Figure = getattr(trial.last, what)
        at = f"at {trial.full_V:g} V in reverse"
        yield _Look(at, figure, figure.budget.expanded(CERTAIN).U, bands[-1])
    count = sum(rung.looks for rung in rungs)
    for rung, band in zip(rungs, bands, strict=True):
        peak: Figure = getattr(rung, f"peak_{what}")
        # The largest of many readings is far out by chance.
        U = peak.budget.expanded(1 - (1 - CERTAIN) / count).U
        yield _Look(f"at {rung.target_V:g} V in reverse, at its worst,", peak, U, band)


def _of_leakage(
    stage: Stage, trial: Trial, bands: Sequence[ReverseBand], bleeder_ohm: float | None
) -> Iterator[Remark]:
    leaks = [r for look in _looks(trial, bands, "leakage") if (r := _too_much(stage, look))]
    if leaks:
        yield min(leaks, key=lambda remark: remark.weight != "fault")
    elif trial.last is not None:
        leakage, least = trial.last.leakage, bands[-1].least_A
        U = leakage.budget.expanded(CERTAIN).U
        if leakage.value + U < least:
            yield Remark(
                "doubt",
                f"at {trial.full_V:g} V in reverse {_passing(leakage, U)}, less than the least "
                f"that the datasheets' tolerances allow ({spoken(least, 'A')}): suspect a part "
                "that is missing or another part",
            )
    for look in _looks(trial, bands, "guarded"):
        most = max(look.band.most_V, 0.0)
        if look.figure.value - look.U > PLAINLY * most:
            yield Remark(
                "doubt",
                f"{look.at} the guarded port is driven {spoken(look.figure.value, 'V')} below "
                f"zero, further than the datasheets' tolerances allow ({spoken(most, 'V')})",
            )
            break
    if trial.last is not None and bands[-1].most_V >= BLIND * trial.last.voltage_V:
        yield Remark(
            "doubt",
            "the trial cannot tell a part that leaks from one that blocks: declare "
            + ("bench.bleeder_ohm" if bleeder_ohm is None else
               f"a bench.bleeder_ohm below {bleeder_ohm:g}"),
        )  # fmt: skip


def _too_much(stage: Stage, look: _Look) -> Remark | None:
    """More than the sheets allow, if it is."""
    leakage, U = look.figure, look.U
    most = max(look.band.most_A, 0.0 if getattr(stage.main_part, "leakage", None) else UNSAID_A)
    if leakage.value - U > max(FAR * most, FLOWS_A):
        return Remark(
            "fault",
            f"the stage does not block in reverse: {look.at} {_passing(leakage, U)}, far more than "
            f"the most that the datasheets' tolerances allow ({spoken(most, 'A')})",
        )
    if leakage.value - U > most:
        return Remark(
            "doubt",
            f"{look.at} {_passing(leakage, U)}, more than the most that the datasheets' tolerances "
            f"allow ({spoken(most, 'A')}): suspect a part that was hurt, dirt across it, or "
            "another part",
        )
    return None


def _passing(leakage: Figure, U: float) -> str:
    return f"{spoken(leakage.value, 'A')} ± {spoken(U, 'A', 2)} flow through it"


def _changed(trial: Trial) -> Iterator[Remark]:
    """The trial is to leave the part as it was."""
    found = []
    for change in trial.changes:
        U = change.budget.expanded(CERTAIN).U
        if abs(change.change_V) > U:
            found.append((abs(change.change_V) / U, change, U))
    if found:
        _, change, U = max(found, key=lambda each: each[0])
        way = "more" if change.change_V > 0 else "less"
        yield Remark(
            "fault",
            f"the trial changed the part: at {change.current_A:g} A it drops "
            f"{spoken(abs(change.change_V), 'V')} {way} than before, and no more than "
            f"{spoken(U, 'V', 2)} can be the measurement's",
        )


def untested(trial: Trial | None, file_limit_A: float) -> list[str]:
    """What a signature does not cover of the stage being connected the wrong way round."""
    if trial is None:
        return ["reversed polarity: no voltage was applied the wrong way round"]
    if trial.short:
        return [f"reversed polarity, as it should have been: {trial.short}"]
    time = f"{trial.full_V:g} V for {trial.dwell_s:.0f} s" if trial.dwell_s else (
        f"{trial.full_V:g} V for a moment"
    )  # fmt: skip
    return [
        f"reversed polarity beyond {time}, with more than {file_limit_A:g} A behind it, when "
        "warmer than here, or while the guarded side holds a voltage of its own"
    ]


def strongest(bands: Sequence[ReverseBand], trial: Trial | None) -> ReverseBand | None:
    """The band that goes with ``trial.last``: the bands are those of its rungs and then of it."""
    return bands[-1] if trial is not None and trial.last is not None else None
