"""A lot: every board in turn, resumable, and the lot's report."""

from __future__ import annotations

import multiprocessing
import multiprocessing.connection
import os
import signal
import threading
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import BrokenExecutor, Future, ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

from benchkit.errors import BenchkitError, InputError, NotConfirmedOff, Tripped
from benchkit.evaluation.evaluate import Evaluation, evaluate
from benchkit.metrology import overall
from benchkit.records.record import Record, read_json, read_record
from benchkit.records.result import Verdict
from benchkit.records.run_folder import write_json, write_text
from instruments.bench import Bench
from procedures.interrupts import NAMES
from procedures.screen import Screen
from procedures.verify import Done, Job, run_board, write_report

COUNTED = ("finished", "tripped")
"""Runs of these statuses stand; others are measured again on --resume."""


@dataclass(frozen=True)
class Lot:
    """Where a lot is measured into."""

    name: str
    serials: Sequence[str]
    folder: Path

    def board(self, serial: str) -> Path:
        """The run folder of a board."""
        return self.folder / "boards" / serial


def prepare(lot: Lot, *, resume: bool) -> list[str]:
    """Return the serials still to do. InputError when the folder holds a lot and resume is off.

    A run that was not finished is set aside under another name: its record stays, and does not
    count.
    """
    boards = lot.folder / "boards"
    if boards.exists() and not resume:
        raise InputError(
            f"{lot.folder}: holds a lot already; give --resume to go on with it, or another --out"
        )
    todo = []
    for serial in lot.serials:
        folder = lot.board(serial)
        if folder.exists() and not _stands(folder):
            number = 1
            while (aside := folder.with_name(f"{serial}.unfinished-{number}")).exists():
                number += 1
            folder.rename(aside)
        if not folder.exists():
            todo.append(serial)
    return todo


def _stands(folder: Path) -> bool:
    try:
        return read_json(folder / "manifest.json").get("status") in COUNTED
    except InputError:
        return False


class _Reports:
    """Draws board reports in a process of its own, while the next board is being measured."""

    def __init__(self) -> None:
        context = multiprocessing.get_context("spawn")
        self._pool = ProcessPoolExecutor(1, context, _begin_worker)
        self._waiting: list[tuple[Path, Future[Path] | None]] = []

    def order(self, folder: Path) -> None:
        """Have a run's report drawn."""
        try:
            self._waiting.append((folder, self._pool.submit(write_report, folder)))
        except BrokenExecutor:
            self._waiting.append((folder, None))

    def __enter__(self) -> _Reports:
        return self

    def __exit__(self, kind: type[BaseException] | None, *rest: object) -> None:
        """Wait for the last report. Those that a killed process left over are drawn here."""
        del rest
        self._pool.shutdown(wait=True)
        for folder, future in self._waiting if kind is None else ():
            try:
                if future is None:
                    raise BrokenExecutor
                future.result()
            except BrokenExecutor:
                write_report(folder)


def _begin_worker() -> None:
    """Leave signals alone, and end when the process that measures has ended, however it did.

    Signals from the terminal reach every process: the one that measures answers them. Killed
    outright, it could not tell its worker.
    """
    for name in NAMES:
        if hasattr(signal, name):
            signal.signal(getattr(signal, name), signal.SIG_IGN)
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent.sentinel,), daemon=True).start()


def _end_with(sentinel: int) -> None:
    multiprocessing.connection.wait([sentinel])
    os._exit(1)


def run_lot(
    bench: Bench,
    job: Job,
    lot: Lot,
    todo: Sequence[str],
    screen: Screen,
    told: Callable[[Done], None],
) -> BenchkitError | None:
    """Measure the boards of ``todo``; returns the error that ended the lot early, if any.

    A board that trips a limit is a finding about that board: the lot goes on with the next. A
    lost instrument or an operator's stop ends the lot. An output that is not confirmed off is
    raised at once.
    """
    done = len(lot.serials) - len(todo)
    with screen.progress(lot.name, len(lot.serials)), _Reports() as reports:
        for serial in todo:
            screen.advance(done, f"{lot.name}: {serial}")
            board = run_board(bench, job, serial, lot.board(serial), screen)
            if isinstance(board.error, NotConfirmedOff):
                raise board.error  # nothing comes before making the bench safe
            reports.order(board.folder)
            done += 1
            told(board)
            if board.error is not None and not isinstance(board.error, Tripped):
                return board.error
        screen.advance(done, f"{lot.name}: reports")
    return None


def measured(lot: Lot, known: Mapping[str, Evaluation]) -> list[tuple[str, Record, Evaluation]]:
    """Every board that stands, judged from its record, in the lot's order.

    ``known`` holds those that this process has judged from their records already.
    """
    found = []
    for serial in lot.serials:
        folder = lot.board(serial)
        if folder.exists() and _stands(folder):
            record = read_record(folder)
            found.append((serial, record, known.get(serial) or evaluate(record, serial)))
    return found


def conclude(
    lot: Lot, known: Mapping[str, Evaluation] | None = None
) -> tuple[dict[str, object], Verdict]:
    """Write ``lot.json`` and ``lot.html`` from the records alone (``known``: see ``measured``)."""
    from benchkit.reports.lot import lot_report

    boards = measured(lot, known or {})
    for _, record, e in boards:
        # A process that was killed outright had not drawn them all.
        if not (record.path / "report.html").exists():
            write_report(record.path, e)
    verdicts: dict[str, Verdict] = {serial: e.result.verdict for serial, _, e in boards}
    missing = [serial for serial in lot.serials if serial not in verdicts]
    owed: list[Verdict] = ["undecided" for _ in missing]
    verdict = overall([*verdicts.values(), *owed])
    document: dict[str, object] = {
        "schema": 1,
        "lot": lot.name,
        "verdict": verdict,
        "planned": list(lot.serials),
        "missing": missing,
        "boards": [
            {
                "serial": serial,
                "verdict": e.result.verdict,
                "why": e.result.why,
                "run": str(record.path.relative_to(lot.folder)),
            }
            for serial, record, e in boards
        ],
    }
    write_json(lot.folder / "lot.json", document)
    rows = [
        (record, e, f"{record.path.relative_to(lot.folder).as_posix()}/report.html")
        for _, record, e in boards
    ]
    write_text(lot.folder / "lot.html", lot_report(lot.name, rows, list(lot.serials)))
    return document, verdict
