"""Every scenario that a stage must stand or that was tried: predicted, and found."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from benchkit.evaluation.part import Part, ScenarioFound
from benchkit.evaluation.promised import Promised
from benchkit.evaluation.reverse import Trial
from benchkit.evaluation.reverse_band import ReverseBand
from benchkit.evaluation.spelled import paired, spanned
from benchkit.records.result import Measurand

CERTAIN = 0.999
"""Coverage at which a disagreement is one: chance has its share of every board."""
NOT_TRIED = "not tried on this board"


def scenarios_found(
    promise: Promised,
    drops: Sequence[Measurand],
    trial: Trial | None,
    band: ReverseBand | None,
    parts: Sequence[Part],
) -> Iterator[ScenarioFound]:
    """Those of ``stage.must_stand`` first, in their order.

    drops: the rows of the forward drop. band: of the ladder's last state.
    """
    found = [
        *_right_way(promise, drops),
        *(_ladder(trial, band) if trial is not None and band is not None else ()),
        *(one for part in parts for one in part.scenarios),
    ]
    required = [one.name for one in promise.scenarios]
    for name in required:
        mine = [one for one in found if one.scenario == name]
        yield from mine or [_not_tried(promise, name)]
    yield from (one for one in found if one.scenario not in required)


def _right_way(promise: Promised, drops: Sequence[Measurand]) -> Iterator[ScenarioFound]:
    """The drop at the current nearest to the nominal one."""
    rows = [row for row in drops if row.name == "drop" and row.measured is not None]
    if not rows:
        return
    nominal = promise.stage.file.stage.current_nominal_A

    def away(row: Measurand) -> float:
        return abs(float(row.condition.partition(" ")[0]) - nominal)

    row = min(rows, key=away)
    assert row.measured is not None
    assert row.predicted is not None
    agrees = None if row.en is None else abs(row.en) <= 1
    yield ScenarioFound(
        "right-way", f"drop at {row.condition.partition(',')[0]}",
        spanned(row.predicted["low"], row.predicted["high"], "V"),
        paired(row.measured, row.U or 0.0, "V"), agrees,
    )  # fmt: skip


def _ladder(trial: Trial, band: ReverseBand) -> Iterator[ScenarioFound]:
    """The full reverse voltage, with next to nothing on the guarded port."""
    if trial.last is None:
        return
    at = f"at {trial.full_V:g} V"
    for what, figure, promised, unit in (
        (f"leakage {at}", trial.last.leakage, band.leakage, "A"),
        (f"guarded port below zero {at}", trial.last.guarded, band.guarded, "V"),
    ):
        U = figure.budget.expanded().U
        far = figure.budget.expanded(CERTAIN).U
        inside = promised.low - far <= figure.value <= promised.high + far
        yield ScenarioFound(
            "reversed-source",
            what,
            spanned(promised.low, promised.high, unit),
            paired(figure.value, U, unit),
            inside,
        )


def _not_tried(promise: Promised, name: str) -> ScenarioFound:
    """What the prediction says of it in words."""
    one = next(found for found in promise.scenarios if found.name == name)
    said = "; ".join(one.notes) or ("it stands" if one.stands else "it does not stand")
    return ScenarioFound(name, "as a whole", said, NOT_TRIED)
