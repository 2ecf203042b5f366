"""`netlist`: a stage in one of its scenarios as a SPICE deck."""

from __future__ import annotations

import sys
from pathlib import Path

from benchkit.errors import InputError
from benchkit.files import StageFile, load
from benchkit.prediction.decks import scenario_deck
from benchkit.records.run_folder import write_text
from benchkit.stage import build_stage


def show_netlist(path: Path, scenario: str, ambient_C: float | None, out: Path | None) -> int:
    """Print the deck, or write it to a file."""
    stage = build_stage(load(StageFile, path), str(path))
    if out is not None and (out.is_dir() or not out.parent.is_dir()):
        raise InputError(f"--out is {out}: it must be a file in a folder that exists, a.cir")
    deck = scenario_deck(stage, scenario, ambient_C)
    if out is None:
        sys.stdout.write(deck)
    else:
        write_text(out, deck)
    return 0
