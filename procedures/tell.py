"""Results on the terminal: verdict first, then why, then the figures, then what to open."""

from __future__ import annotations

from pathlib import Path

from rich.console import Console
from rich.table import Table

from benchkit.evaluation.verdict import rounded
from benchkit.records.result import Measurand, Result
from procedures.batch import Lot
from procedures.verify import Done

WIDTH = 92
"""What the tables need."""
MARKS = {"pass": "pass", "fail": "FAIL", "undecided": "undecided", None: ""}


def _console() -> Console:
    return Console(highlight=False, soft_wrap=False)


def tell_board(done: Done) -> None:
    """One board."""
    console, result = _console(), done.evaluation.result
    console.print(
        f"{result.serial}  {result.stage}: {MARKS[result.verdict]}", style="bold", markup=False
    )
    for sentence in result.why:
        console.print(f"  - {sentence}", markup=False)
    if result.measurands:
        print_table(console, figures(result))
    for sentence in result.findings:
        if sentence not in result.why:
            console.print(f"note: {sentence}", markup=False)
    console.print(f"not tested: {len(result.not_tested)} things, listed in the report")
    console.print(f"record  {done.folder}", markup=False, soft_wrap=True)
    console.print(f"report  {done.folder / 'report.html'}", markup=False, soft_wrap=True)


def print_table(console: Console, table: Table, least: int = WIDTH) -> None:
    """A table, whole: on a narrow screen its lines run over, for half a number is a wrong one."""
    wide = Console(file=console.file, width=max(console.width, least), highlight=False)
    wide.print(table)


def figures(result: Result) -> Table:
    """The measurands as a table, their conditions shortened: the report has them whole."""
    table = Table(box=None, padding=(0, 1), header_style="bold")
    table.add_column("figure", min_width=12)
    for head in ("measured", "± U", "promised", "limit"):
        table.add_column(head, justify="right", no_wrap=True)
    table.add_column("unit", no_wrap=True)
    table.add_column("verdict", no_wrap=True)
    for m in result.measurands:
        value, spread = rounded(m.measured, m.U)
        table.add_row(
            f"{m.name.replace('_', ' ')}, {m.condition.split(',')[0]}",
            value,
            spread,
            _promised(m),
            _limit(m),
            m.unit,
            MARKS[m.verdict],
        )
    return table


def _promised(m: Measurand) -> str:
    if m.predicted is None:
        return ""
    return f"{m.predicted['low']:.4g} to {m.predicted['high']:.4g}"


def _limit(m: Measurand) -> str:
    low, high = m.limit["low"], m.limit["high"]
    parts = [f"≥ {low:g}" if low is not None else "", f"≤ {high:g}" if high is not None else ""]
    return " ".join(part for part in parts if part)


def tell_lot(lot: Lot, document: dict[str, object]) -> None:
    """A lot: boards that are not good first."""
    console = _console()
    boards = document["boards"]
    assert isinstance(boards, list)
    counts = {v: sum(b["verdict"] == v for b in boards) for v in ("pass", "undecided", "fail")}
    missing = document["missing"]
    assert isinstance(missing, list)
    console.print(
        f"{lot.name}: {MARKS[str(document['verdict'])]}  ({len(boards)} of {len(lot.serials)} "
        f"boards measured: {counts['pass']} pass, {counts['undecided']} undecided, "
        f"{counts['fail']} fail)",
        style="bold",
        markup=False,
    )
    for verdict in ("fail", "undecided"):
        for board in boards:
            if board["verdict"] == verdict:
                console.print(f"{board['serial']}  {MARKS[verdict]}", style="bold", markup=False)
                for sentence in board["why"]:
                    console.print(f"  - {sentence}", markup=False)
    if missing:
        console.print(f"not measured: {', '.join(missing)}", markup=False)
    console.print(f"lot report     {lot.folder / 'lot.html'}", markup=False, soft_wrap=True)
    console.print(
        f"board reports  {Path(lot.folder) / 'boards'}/SERIAL/report.html",
        markup=False,
        soft_wrap=True,
    )
