"""Holds a run against itself: its files against their hashes, its result against its readings."""

from __future__ import annotations

import math
from pathlib import Path
from typing import cast

from benchkit.errors import InputError
from benchkit.evaluation.evaluate import evaluate
from benchkit.records.record import read_json, read_record
from benchkit.records.run_folder import hashes

RELATIVE = 1e-6
"""Figures may differ by this share between machines; verdicts and words may not at all."""


def audit(folder: Path) -> list[str]:
    """Return one sentence a difference; an empty list means that the record is whole.

    A damaged or missing file is a difference, not an error.
    """
    try:
        manifest = read_json(folder / "manifest.json")
    except InputError as error:
        return [str(error)]
    told = _files(folder, cast("dict[str, str]", manifest.get("sha256", {})))
    try:
        again = evaluate(read_record(folder), str(manifest.get("serial"))).result.document()
        recorded = read_json(folder / "result.json")
    except (InputError, ValueError, KeyError) as error:
        return [*told, f"its figures cannot be worked out again: {error}"]
    return told + list(_compare("result", recorded, again))


def _files(folder: Path, listed: dict[str, str]) -> list[str]:
    found = hashes(folder)
    told = [f"{name} is missing" for name in listed if name not in found]
    told += [f"{name} is not in the manifest" for name in found if name not in listed]
    told += [
        f"{name} was changed after the run"
        for name, digest in listed.items()
        if name in found and found[name] != digest
    ]
    return told


def _compare(name: str, recorded: object, again: object) -> list[str]:
    """Walk two documents side by side."""
    if isinstance(recorded, dict) and isinstance(again, dict):
        keys = dict.fromkeys([*recorded, *again])
        return [
            line
            for key in keys
            for line in _compare(f"{name}.{key}", recorded.get(key), again.get(key))
        ]
    if isinstance(recorded, list) and isinstance(again, list) and len(recorded) == len(again):
        return [
            line
            for number, (a, b) in enumerate(zip(recorded, again, strict=True), start=1)
            for line in _compare(f"{name}[{number}]", a, b)
        ]
    if (
        isinstance(recorded, float)
        and isinstance(again, float)
        and math.isclose(recorded, again, rel_tol=RELATIVE, abs_tol=1e-12)
    ):
        return []
    if recorded == again:
        return []
    return [f"{name} is recorded as {recorded!r}, but the readings give {again!r}"]
