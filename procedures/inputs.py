"""Reads what a command was given, and says what is wrong with it before a bench is opened."""

from __future__ import annotations

import difflib
import tempfile
from dataclasses import dataclass
from pathlib import Path

from benchkit.errors import InputError
from benchkit.files import BenchFile, LotFile, StageFile, load
from benchkit.files.lot import check_serial
from benchkit.stage import Stage, build_stage
from instruments.bench import DIALECTS
from instruments.dialects import load_dialect, shipped_dialects
from instruments.simulated.board import parse_faults
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
    _check_instruments(bench, bench_path)
    stage = build_stage(stage_file, str(stage_path))
    _check_measurable(stage, stage_path)
    try:
        plan = plan_board(stage, bench, bench_path.parent)
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


def _check_measurable(stage: Stage, path: Path) -> None:
    """InputError for a stage that can be predicted, but that no procedure measures, or not so."""
    working = stage.file.stage
    if working.topology == "network":
        raise InputError(
            f'{path}: stage.topology is "network": a circuit of your own is predicted, not '
            "measured, since nothing says what its readings would mean; `benchkit predict` "
            "answers for it"
        )
    if stage.file.soak is None:
        return
    if stage.conducts == "lead":
        raise InputError(
            f"{path}: soak is given, but in a {working.topology} the working current does not "
            f"flow through {stage.main}, whose case is measured: leave [soak] out"
        )
    between = [stage.names[role] for role in ("fuse", "lead") if role in stage.names]
    if between:
        raise InputError(
            f"{path}: parts.{between[0]} is in the way of the current: its heat would be "
            f"taken for that of {stage.main}. Leave [soak] out, or put the drop point's taps "
            f"across {stage.main} and measure with a file that leaves {' and '.join(between)} out"
        )


def _check_instruments(bench: BenchFile, path: Path) -> None:
    """InputError for what would only come out once the bench is opened."""
    mistakes = []
    for name, item in bench.instruments.items():
        shipped = item.dialect in shipped_dialects()
        if not shipped and not item.dialect.endswith(".toml"):
            near = difflib.get_close_matches(item.dialect, shipped_dialects(), 1)
            mistakes.append(
                f"instruments.{name}.dialect is {item.dialect!r}, it must be one of "
                f"{', '.join(shipped_dialects())}, or a path ending in .toml"
                + (f"; the nearest is {near[0]}" if near else "")
            )
            continue
        try:
            load_dialect(
                item.dialect if shipped else path.parent / item.dialect, DIALECTS[item.kind]
            )
        except InputError as error:
            mistakes.append(f"instruments.{name}.dialect is {item.dialect!r}: {error}")
    if bench.simulated is not None:
        for serial, spelled in bench.simulated.boards.items():
            try:
                parse_faults(spelled)
            except ValueError as error:
                mistakes.append(f"simulated.boards.{serial}: {error}")
        stage = bench.simulated.stage
        if stage is not None and not (path.parent / stage).is_file():
            mistakes.append(
                f"simulated.stage is {stage!r}, but there is no file {path.parent / stage}"
            )
    if mistakes:
        raise InputError("\n".join(f"{path}: {mistake}" for mistake in mistakes))


def check_writable(folder: Path) -> None:
    """InputError when results cannot go to ``folder``, which need not exist yet."""
    there = folder.absolute()
    while not there.exists():
        there = there.parent
    if not there.is_dir():
        raise InputError(f"--out is {folder}, but {there} is a file: give a folder")
    try:
        with tempfile.TemporaryFile(dir=there):
            pass
    except OSError as error:
        raise InputError(
            f"--out is {folder}, but nothing can be written in {there}: {error.strerror}; give "
            "another folder"
        ) from None


def read_serial(serial: str) -> str:
    """A serial from the command line."""
    try:
        return check_serial(serial)
    except ValueError as error:
        raise InputError(f"--serial: {error}") from None
