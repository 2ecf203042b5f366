"""`report` and `audit`: both start from the record, and from nothing else."""

from __future__ import annotations

import json
import sys
from pathlib import Path

from benchkit.audit import audit
from benchkit.errors import InputError
from benchkit.records.record import read_json
from procedures.batch import Lot, conclude
from procedures.verify import write_report


def rebuild(paths: list[Path]) -> int:
    """Write every report anew."""
    for path in paths:
        for run in runs_below(path):
            sys.stdout.write(f"{write_report(run)}\n")
        if (path / "lot.json").is_file():
            document = read_json(path / "lot.json")
            planned = document["planned"]
            assert isinstance(planned, list)
            conclude(Lot(str(document["lot"]), planned, path))
            sys.stdout.write(f"{path / 'lot.html'}\n")
    return 0


def runs_below(path: Path) -> list[Path]:
    """The finished runs of a lot's folder, or the one run folder that ``path`` is."""
    if (path / "readings.csv").is_file():
        return [path]
    found = sorted(p.parent for p in path.glob("boards/*/manifest.json"))
    if not found:
        raise InputError(f"{path}: is neither a run folder nor a lot's folder")
    return found


def audit_runs(paths: list[Path], *, as_json: bool) -> int:
    """0 when every record is whole and says what its readings say; 1 otherwise."""
    found = [(str(run), audit(run)) for path in paths for run in runs_below(path)]
    if as_json:
        documents = [{"run": run, "differences": differences} for run, differences in found]
        json.dump(documents, sys.stdout, indent=1, ensure_ascii=False)
        sys.stdout.write("\n")
    else:
        for run, differences in found:
            sys.stdout.write(f"{run}: {'DIFFERS' if differences else 'whole'}\n")
            for line in differences:
                sys.stdout.write(f"  - {line}\n")
    return int(any(differences for _, differences in found))
