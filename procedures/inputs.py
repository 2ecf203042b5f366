"""Reads what a command was given, and says what is wrong with it before a bench is opened."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from benchkit.errors import InputError
from benchkit.files import BenchFile, LotFile, StageFile, load
from benchkit.files.lot import check_serial
from benchkit.stage import build_stage
from procedures.plan import plan_board
from procedures.verify import Job


@dataclass(frozen=True)
class BoardInputs:
    """A bench and a stage, read and planned."""

    bench: BenchFile
    bench_path: Path
    job: Job


def read_board(
    stage_path: Path, bench_path: Path, extra: dict[str, Path] | None = None
) -> BoardInputs:
    """Read and check stage and bench, and plan the run. InputError says all that is wrong."""
    mistakes = []
    stage_file = bench = None
    try:
        stage_file = load(StageFile, stage_path)
    except InputError as error:
        mistakes.append(str(error))
    try:
        bench = load(BenchFile, bench_path)
    except InputError as error:
        mistakes.append(str(error))
    if stage_file is None or bench is None:
        raise InputError("\n".join(mistakes))
    stage = build_stage(stage_file, str(stage_path))
    try:
        plan = plan_board(stage, bench)
    except InputError as error:
        raise InputError(f"{stage_path} on {bench_path}: {error}") from None
    inputs = {"bench.toml": bench_path, "stage.toml": stage_path, **(extra or {})}
    return BoardInputs(bench, bench_path, Job(stage, plan, stage_path, inputs))


def read_lot(lot_path: Path, bench_path: Path) -> tuple[LotFile, BoardInputs]:
    """Read a lot, the stage it names, and the bench."""
    lot = load(LotFile, lot_path)
    stage_path = lot_path.parent / lot.lot.stage
    if not stage_path.is_file():
        raise InputError(
            f"{lot_path}: lot.stage is {lot.lot.stage!r}, but there is no file {stage_path}"
        )
    return lot, read_board(stage_path, bench_path, {"lot.toml": lot_path})


def read_serial(serial: str) -> str:
    """A serial from the command line."""
    try:
        return check_serial(serial)
    except ValueError as error:
        raise InputError(f"--serial: {error}") from None
