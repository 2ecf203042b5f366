"""Reads a run folder back. Everything that judges or reports works from this, never from memory:
what `verify` says of a board is what anyone can work out from its record."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import cast

from benchkit.errors import InputError
from benchkit.files import BenchFile, StageFile, load
from benchkit.reading import Reading, Status
from benchkit.records.run_folder import COLUMNS


@dataclass(frozen=True)
class Record:
    """A run as it was recorded."""

    path: Path
    bench: BenchFile
    stage: StageFile
    readings: tuple[tuple[str, Reading], ...]
    """(step, reading), in the order they came."""
    events: tuple[dict[str, object], ...]

    def at(self, step: str, point: str) -> list[Reading]:
        """Usable readings of a point in a step, or in the steps below it (``sweep/``)."""
        below = step if step.endswith("/") else None
        return [
            r
            for name, r in self.readings
            if (name == step or (below and name.startswith(below)))
            and r.point == point
            and r.usable
        ]

    def steps(self, prefix: str) -> list[str]:
        """Step names that begin with ``prefix``, in order of first reading."""
        return list(dict.fromkeys(name for name, _ in self.readings if name.startswith(prefix)))

    def said(self, kind: str) -> list[str]:
        """Texts of the events of one kind."""
        return [str(event["text"]) for event in self.events if event.get("kind") == kind]


def read_record(path: Path) -> Record:
    """Read a run folder; InputError names the file that is missing or damaged."""
    if not (path / "readings.csv").is_file():
        raise InputError(f"{path}: is not a run folder: it has no readings.csv")
    return Record(
        path,
        load(BenchFile, path / "inputs" / "bench.toml"),
        load(StageFile, path / "inputs" / "stage.toml"),
        tuple(_readings(path / "readings.csv")),
        tuple(_events(path / "events.jsonl")),
    )


def read_json(path: Path) -> dict[str, object]:
    """A JSON document of a run; InputError when it is missing or damaged."""
    try:
        document = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputError(f"{path}: is missing: the run was not finished") from None
    except ValueError as error:
        raise InputError(f"{path}: is not valid JSON: {error}") from None
    if not isinstance(document, dict):
        raise InputError(f"{path}: must hold one JSON object")
    return cast("dict[str, object]", document)


def _readings(path: Path) -> Iterator[tuple[str, Reading]]:
    """A last line cut short by a killed process is left out; any other damage is an error."""
    text = path.read_text(encoding="utf-8")
    lines = text.splitlines()
    if text and not text.endswith("\n"):
        lines.pop()
    rows = csv.reader(lines)
    if tuple(next(rows, ())) != COLUMNS:
        raise InputError(f"{path}: line 1 must be {','.join(COLUMNS)}")
    for number, row in enumerate(rows, start=2):
        try:
            time_s, step, point, value, unit, u, full, status = row
            yield (
                step,
                Reading(
                    float(time_s),
                    point,
                    float(value),
                    unit,
                    float(u),
                    float(full),
                    cast("Status", status),
                ),
            )
        except ValueError:
            raise InputError(f"{path}: line {number} is not a reading: {','.join(row)}") from None


def _events(path: Path) -> Iterator[dict[str, object]]:
    lines = path.read_text(encoding="utf-8").split("\n")
    for number, line in enumerate(lines[:-1], start=1):
        try:
            yield json.loads(line)
        except ValueError:
            raise InputError(f"{path}: line {number} is not valid JSON") from None
