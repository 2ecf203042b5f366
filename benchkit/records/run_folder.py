"""Writes one run's folder, so that a killed process loses nothing that was used.

``readings.csv`` is unbuffered: each line is handed to the operating system before the reading is
returned to whoever asked, and the file is synced to disk at each step and at least once a second.
``manifest.json`` is written last, atomically: a folder without one is an unfinished run.
"""

from __future__ import annotations

import csv
import hashlib
import io
import json
import os
import time
from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType

from benchkit.reading import Reading

COLUMNS = ("time_s", "step", "point", "value", "unit", "u", "range", "status")
SYNC_S = 1.0


def stamp() -> str:
    """The wall clock, UTC, to the millisecond."""
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


class RunFolder:
    """An open run. Fulfils ``benchkit.protocols.Journal``."""

    def __init__(self, path: Path, inputs: Mapping[str, Path]) -> None:
        """Make the folder (it must not exist) and copy the input files into ``inputs/``."""
        self.path = path
        (path / "inputs").mkdir(parents=True)
        for name, source in inputs.items():
            (path / "inputs" / name).write_bytes(source.read_bytes())
        self.started = stamp()
        flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_APPEND
        self._readings = os.open(path / "readings.csv", flags, 0o644)
        self._events = os.open(path / "events.jsonl", flags, 0o644)
        self._traffic = (path / "traffic.log").open("x", encoding="utf-8", newline="\n")
        self._line = io.StringIO()
        self._writer = csv.writer(self._line, lineterminator="\n")
        self._write(COLUMNS)
        self._synced = time.monotonic()

    def reading(self, step: str, reading: Reading) -> None:
        """Append one reading."""
        self._write(
            (
                repr(reading.time_s),
                step,
                reading.point,
                repr(reading.value),
                reading.unit,
                repr(reading.u),
                repr(reading.range),
                reading.status,
            )
        )
        if time.monotonic() - self._synced > SYNC_S:
            self.sync()

    def _write(self, row: tuple[str, ...]) -> None:
        self._line.seek(0)
        self._line.truncate()
        self._writer.writerow(row)
        os.write(self._readings, self._line.getvalue().encode())

    def event(self, kind: str, text: str, **facts: object) -> None:
        """Append one event, and sync."""
        line = {"at": stamp(), "kind": kind, "text": text, **facts}
        os.write(self._events, (json.dumps(line, ensure_ascii=False) + "\n").encode())
        if kind in ("step", "on", "off", "trip", "stopped", "not-confirmed-off"):
            self.sync()

    def traffic(self, role: str, direction: str, text: str) -> None:
        """Append one SCPI message; ``direction`` is ">" to the instrument, "<" from it."""
        self._traffic.write(f"{time.time():.6f} {role} {direction} {text.rstrip()}\n")

    def sync(self) -> None:
        """Have everything on disk."""
        self._traffic.flush()
        for descriptor in (self._readings, self._events, self._traffic.fileno()):
            os.fdatasync(descriptor)
        self._synced = time.monotonic()

    def close(self, documents: Mapping[str, object], manifest: Mapping[str, object]) -> None:
        """Write the JSON documents, then the manifest with every file's hash."""
        self.sync()
        self._shut()
        for name, document in documents.items():
            write_json(self.path / name, document)
        seal(self.path, {**manifest, "started": self.started, "ended": stamp()})

    def _shut(self) -> None:
        if not self._traffic.closed:
            self._traffic.close()
            os.close(self._readings)
            os.close(self._events)

    def __enter__(self) -> RunFolder:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._shut()


def write_json(path: Path, document: object) -> None:
    """Write a document atomically, keys in their own order, one trailing newline."""
    write_text(path, json.dumps(document, indent=1, ensure_ascii=False, allow_nan=False) + "\n")


def write_text(path: Path, text: str) -> None:
    """Write a text file atomically: it is there whole, or as it was before."""
    beside = path.with_name(path.name + ".part")
    beside.write_text(text, encoding="utf-8", newline="\n")
    os.replace(beside, path)


def hashes(folder: Path) -> dict[str, str]:
    """SHA-256 of every file of a run but its manifest and its report, by relative path.

    The report is left out because it can be rebuilt from the rest at any time, by a newer version
    too; everything it says is in the record.
    """
    left_out = {"manifest.json", "report.html"}
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and str(path.relative_to(folder)) not in left_out
    }


def seal(folder: Path, manifest: Mapping[str, object]) -> None:
    """Write ``manifest.json`` with the hashes of everything else."""
    write_json(folder / "manifest.json", {**manifest, "sha256": hashes(folder)})
