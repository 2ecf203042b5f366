"""What `verify` and `batch` do around the bench: read, open, measure, tell."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from benchkit.errors import BenchkitError, NotConfirmedOff
from benchkit.evaluation.evaluate import Evaluation
from benchkit.protocols import Operator
from benchkit.reading import Reading
from instruments.bench import Bench, open_bench
from procedures.batch import Lot, conclude, prepare, run_lot
from procedures.exits import report_error
from procedures.inputs import BoardInputs, check_writable, read_board, read_lot, read_serial
from procedures.interrupts import Interrupts
from procedures.operators import (
    ConsoleOperator,
    SimulatedOperator,
    UnattendedOperator,
    check_somebody_is_there,
)
from procedures.plan import Plan
from procedures.screen import Screen
from procedures.tell import tell_board, tell_lot
from procedures.unattended import check_unattended
from procedures.verify import Done, free_folder, run_board, write_report

CODES = {"pass": 0, "fail": 1, "undecided": 1}


class _NoJournal:
    """Before the first run begins there is nothing to write to."""

    def reading(self, step: str, reading: Reading) -> None:
        """Nowhere to go yet."""

    def event(self, kind: str, text: str, **facts: object) -> None:
        """Nowhere to go yet."""


@contextmanager
def opened(inputs: BoardInputs, screen: Screen, *, unattended: bool = False) -> Iterator[Bench]:
    """The bench of a command, with its operator, live readings and signals.

    InputError, before anything is opened, for a real bench with nobody at the terminal, unless
    that is meant and the bench can do without.
    """
    operator: Operator = SimulatedOperator(screen)
    if unattended:
        check_unattended(inputs)
        operator = UnattendedOperator()
    elif not inputs.bench.is_simulated:
        check_somebody_is_there()
        operator = ConsoleOperator(screen)
    interrupts = Interrupts()
    with (
        interrupts.listening(),
        open_bench(
            inputs.bench,
            inputs.bench_path,
            operator,
            _NoJournal(),
            unattended=unattended,
            shield=interrupts.shield,
            watcher=screen.reading,
        ) as bench,
    ):
        yield bench


def verify_board(
    stage: Path, bench_path: Path, serial: str, out: Path | None, *,
    dry_run: bool, as_json: bool, unattended: bool = False,
) -> int:  # fmt: skip
    """`benchkit verify`."""
    serial = read_serial(serial)
    inputs = read_board(stage, bench_path)
    if unattended:
        check_unattended(inputs)
    screen = Screen(quiet=as_json)
    if dry_run:
        return _show_plan(inputs.job.plan, as_json=as_json)
    check_writable(out or Path("runs"))
    folder = free_folder(out or Path("runs"), serial)
    with opened(inputs, screen, unattended=unattended) as bench:
        done = run_board(bench, inputs.job, serial, folder, screen)
    if isinstance(done.error, NotConfirmedOff):
        raise done.error  # nothing comes before making the bench safe; `report` draws it later
    write_report(done.folder, done.evaluation)
    if as_json:
        _print_json(done.evaluation.result.document())
    else:
        tell_board(done)
    return _code(done)


def batch_lot(
    lot_path: Path,
    bench_path: Path,
    out: Path | None,
    *,
    resume: bool,
    dry_run: bool,
    as_json: bool,
) -> int:
    """`benchkit batch`."""
    lot_file, inputs = read_lot(lot_path, bench_path)
    screen = Screen(quiet=as_json)
    if dry_run:
        return _show_plan(inputs.job.plan, as_json=as_json, boards=len(lot_file.lot.serials))
    name = lot_file.lot.name
    lot = Lot(name, lot_file.lot.serials, out or Path("runs") / _slug(name))
    code, document = measure_lot(inputs, lot, screen, resume=resume)
    if as_json:
        _print_json(document)
    else:
        tell_lot(lot, document)
    return code


def measure_lot(
    inputs: BoardInputs, lot: Lot, screen: Screen, *, resume: bool
) -> tuple[int, dict[str, object]]:
    """Measure what is still to do of a lot and conclude it; exit code and ``lot.json``."""
    check_writable(lot.folder)
    todo = prepare(lot, resume=resume)
    ended: BenchkitError | None = None
    known: dict[str, Evaluation] = {}

    def told(done: Done) -> None:
        known[done.evaluation.result.serial] = done.evaluation
        _line(screen, done)

    if todo:
        with opened(inputs, screen) as bench:
            ended = run_lot(bench, inputs.job, lot, todo, screen, told)
    document, verdict = conclude(lot, known)
    if ended is not None:
        return report_error(ended), document
    return CODES[verdict], document


def _line(screen: Screen, done: Done) -> None:
    result = done.evaluation.result
    why = f": {result.why[0]}" if result.verdict != "pass" and result.why else ""
    screen.say(f"{result.serial}  {result.verdict}{why}")


def _code(done: Done) -> int:
    if done.error is not None:
        return report_error(done.error)
    return CODES[done.evaluation.result.verdict]


def _show_plan(plan: Plan, *, as_json: bool, boards: int = 1) -> int:
    if as_json:
        _print_json({**plan.document(), "boards": boards})
        return 0
    if boards > 1:
        sys.stdout.write(f"for each of {boards} boards:\n")
    for line in plan.lines():
        sys.stdout.write(line + "\n")
    return 0


def _print_json(document: object) -> None:
    json.dump(document, sys.stdout, indent=1, ensure_ascii=False, allow_nan=False)
    sys.stdout.write("\n")


def _slug(name: str) -> str:
    kept = "".join(c if c.isalnum() or c in "._-" else "-" for c in name)
    return kept.strip("-.") or "lot"
