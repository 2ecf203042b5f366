"""The report of a lot: which boards differ, how the lot is spread, and every serial."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from urllib.parse import quote

from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.verdict import rounded
from benchkit.metrology import overall
from benchkit.records.record import Record
from benchkit.records.result import Result, Verdict
from benchkit.reports.lot_figures import lot_figure
from benchkit.reports.pages import render
from benchkit.reports.quantities import (
    Quantity,
    left_out_of,
    line_of,
    quantities_of,
    remarks_on,
    same_condition,
)
from benchkit.reports.words import NONE, degrees, named, rescaled, unit_of

KEY = (
    "warm_drop", "case_hottest", "junction_margin", "thermal_resistance", "reverse_leakage",
    "reverse_guarded",
)  # fmt: skip
"""Drawn board by board even where nothing is asked of them."""
COLUMNS = 5
"""Key figures beside each serial."""
REASONS = 3
ANSWERS = {
    "pass": "Yes, for what was tested here.",
    "fail": "No: not every board passes.",
    "undecided": "Not yet: not every board is decided.",
}


@dataclass(frozen=True)
class Board:
    """One run of one serial; an earlier run of a serial measured again does not count."""

    serial: str
    link: str
    verdict: str
    cells: list[str]
    superseded: bool


@dataclass(frozen=True)
class Different:
    """A board to look at first, and why."""

    serial: str
    link: str
    verdict: str
    reasons: list[str]


def lot_report(
    lot_name: str, runs: Sequence[tuple[Record, Evaluation, str]], planned: Sequence[str]
) -> str:
    """A lot as self-contained HTML, the same bytes for the same records.

    runs: record, evaluation and relative link to its report, in the order measured; of several
    runs of one serial the last counts, and the earlier ones are listed as measured again.
    planned: the serials that the lot was to hold.
    """
    from markupsafe import Markup

    last = {evaluation.result.serial: k for k, (_, evaluation, _) in enumerate(runs)}
    counted = [k for k, (_, e, _) in enumerate(runs) if last[e.result.serial] == k]
    results = [runs[k][1].result for k in counted]
    serials = [result.serial for result in results]
    failed = [k for k, result in enumerate(results) if result.verdict == "fail"]
    quantities = quantities_of([result.measurands for result in results], failed)
    missing = [serial for serial in planned if serial not in last]
    verdicts: list[Verdict] = [result.verdict for result in results]
    owed: list[Verdict] = ["undecided"] * len(missing)
    verdict = overall([*verdicts, *owed])
    panels, keys = _drawn(quantities), _chosen(quantities)
    boards = []
    for k, (_, evaluation, link) in enumerate(runs):
        result = evaluation.result
        # Not by place in the lot: a run that a later one supersedes has none.
        mine = {(m.name, same_condition(m.condition)): m for m in result.measurands}
        cells = [
            None if (row := mine.get((key.name, key.condition))) is None
            else rescaled(row, key.factor, key.unit)
            for key in keys
        ]  # fmt: skip
        boards.append(Board(
            result.serial, quote(link, safe="/"), result.verdict,
            [NONE if c is None or c.measured is None else rounded(c.measured, c.U)[0]
             for c in cells],
            k not in counted,
        ))  # fmt: skip
    different = _different(runs, counted, quantities)
    return render(
        "lot.j2",
        name=lot_name, verdict=verdict, answer=ANSWERS[verdict],
        stages=list(dict.fromkeys(r.stage for r in results)),
        benches=list(dict.fromkeys(record.bench.bench.name for record, _, _ in runs)),
        simulated=any(record.bench.is_simulated for record, _, _ in runs),
        planned=len(planned), counts={v: verdicts.count(v) for v in ("pass", "fail", "undecided")},
        missing=missing, unplanned=[s for s in serials if s not in planned],
        again=len(runs) - len(counted), different=different,
        figure=Markup(lot_figure(panels, serials)), undrawn=len(quantities) - len(panels),
        lines=[line_of(quantity) for quantity in quantities], remarks=remarks_on(quantities),
        left_out=left_out_of(quantities, serials, failed),
        keys=[(named(q.name), degrees(q.condition), unit_of(q.unit)) for q in keys],
        boards=boards,
        not_tested=_not_tested(results),
        reversed=any(evaluation.trial is not None for _, evaluation, _ in runs),
    )  # fmt: skip


def _drawn(quantities: Sequence[Quantity]) -> list[Quantity]:
    """What is judged and what matters besides; of drops that nothing is asked of, the largest."""
    drops = [q for q in quantities if q.name == "drop"]
    last = [] if any(q.judged for q in drops) else drops[-1:]
    return [q for q in quantities if q.judged or q.name in KEY or q in last]


def _chosen(quantities: Sequence[Quantity]) -> list[Quantity]:
    """Judged figures first, then heat, then the other drops; in their own order."""
    order = sorted(
        range(len(quantities)),
        key=lambda k: (not quantities[k].judged, quantities[k].name == "drop", k),
    )
    return [quantities[k] for k in sorted(order[:COLUMNS])]


def _not_tested(results: Sequence[Result]) -> list[str]:
    """Each sentence once; with the serials, where it does not hold for every board."""
    whose: dict[str, list[str]] = {}
    for result in results:
        for text in result.not_tested:
            whose.setdefault(text, []).append(result.serial)
    told = []
    for text, serials in whose.items():
        names = ", ".join(serials) if len(serials) <= REASONS else f"{len(serials)} boards"
        told.append(text if len(serials) == len(results) else f"{names}: {text}")
    return told


def _different(
    runs: Sequence[tuple[Record, Evaluation, str]], counted: Sequence[int],
    quantities: Sequence[Quantity],
) -> list[Different]:  # fmt: skip
    """Failed boards, undecided ones, then outliers: each once, with every reason."""
    found = []
    for place, k in enumerate(counted):
        _, evaluation, link = runs[k]
        result = evaluation.result
        reasons = []
        if result.verdict != "pass":
            why = [text for text in result.why if text not in result.not_tested]
            reasons = why[:REASONS]
            if len(why) > REASONS:
                reasons.append(f"and {len(why) - REASONS} more, in its own report")
        odd = [q for q in quantities if place in q.odd]
        if odd:
            reasons.append(_outlier(odd, place))
        if reasons:
            found.append(Different(result.serial, quote(link, safe="/"), result.verdict, reasons))
    order = ("fail", "undecided", "pass")
    return sorted(found, key=lambda board: order.index(board.verdict))


def _outlier(odd: Sequence[Quantity], place: int) -> str:
    """Names the figure that is furthest out, in standard deviations of the boards that do not."""

    def far(quantity: Quantity) -> float:
        s = quantity.statistics
        return abs(quantity.values[place] - (s.mean or 0.0)) / (s.sd or 1.0)

    worst = max(odd, key=far)
    s, unit = worst.statistics, unit_of(worst.unit)
    row = worst.rows[place]
    value = rounded(worst.values[place], row.U if row is not None else None)[0]
    mean, sd = rounded(s.mean, s.sd)
    more = f", and stands out in {len(odd) - 1} more" if len(odd) > 1 else ""
    return (
        f"stands out from the lot: {worst.title} is {value} {unit}, the other boards' mean is "
        f"{mean} {unit} with a standard deviation of {sd} {unit}{more}"
    )
