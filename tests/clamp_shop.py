"""A workshop with stages that conduct when reversed, for the tests of their trials."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path

from benchkit.errors import NotConfirmedOff
from benchkit.records.record import Record, read_record
from procedures.commands import opened
from procedures.inputs import read_board
from procedures.screen import Screen
from procedures.verify import Done, run_board, write_report
from tests.benchkit.nine_stages import PARTS, text
from tests.simulated_bench import workshop

QUIET = Screen(quiet=True)
RATED_A, MELTING_A2S, CLEARING_A2S = 1.6, 3.0, 5.0
POINT_A, POINT_S = 6.4, 0.08
FUSE = f"""
kind = "fuse"
standard = "iec-60127-2"
rated_current_A = {RATED_A}
rated_voltage_V = 32
breaking_A = 1500
cold_ohm = 0.05
drop_V = 0.11
melting_A2s = {MELTING_A2S}
clearing_A2s = {CLEARING_A2S}
spread_percent = 0
points = [{{ current_A = {POINT_A}, time_s = {POINT_S} }}]
"""
"""Without spread, and with one point: nothing of its law is left to chance or to a fit."""
WEAK = PARTS["rectifier"].replace("average_current_max_A = 6", "average_current_max_A = 3")
WEAK = WEAK.replace("surge_current_max_A = 300", "surge_current_max_A = 38")
"""A clamp that stands 38 A of a half-sine of 8.3 ms: 6.0 A2s."""
REVERSE = "[reverse]\ncurrent_limit_A = 0.5\n"
LIMITS = """
[limits]
leakage_max_A = 1e-3
guarded_reverse_max_V = 1.0
"""
FUSED = "[fused_trial]\ncurrent_A = 8.0\n"
FUSED_LIMITS = "fuse_clears_max_s = 0.2\nclamp_peak_max_V = 1.3\n"


def stage_text(tables: str, topology: str = "fused-clamp", fuse: str = FUSE) -> str:
    """Of a stage whose working current a fuse of 1.6 A carries."""
    fitted = {"D1": WEAK} | ({"F1": fuse} if topology == "fused-clamp" else {})
    # Without a fuse nothing ends a reversed battery's current: that is not what is tried here.
    stands = 'must_stand = ["right-way", "open"]' if topology == "clamp" else ""
    made = text(topology, stage=stands, tables=tables, **fitted)
    for old, new in (
        ("currents_A = [0.1, 0.5, 1.0, 2.0, 3.0]", "currents_A = [0.1, 0.3, 0.6, 1.0]"),
        ("current_nominal_A = 2.0", "current_nominal_A = 0.6"),
        ("current_max_A = 3.0\n", "current_max_A = 1.0\n"),
    ):
        assert old in made
        made = made.replace(old, new, 1)
    return made


def shop(
    folder: Path,
    tables: str,
    boards: Mapping[str, Sequence[str]],
    *,
    supply: str = "supply-select",
    topology: str = "fused-clamp",
    fuse: str = FUSE,
) -> Path:
    """A workshop with a stage ``mine.toml``; boards: what is wrong with each serial."""
    workshop(folder, supply=supply, trial=True)
    (folder / "mine.toml").write_text(stage_text(tables, topology, fuse), "utf-8")
    bench = folder / "bench.toml"
    listed = "".join(f"{name} = {json.dumps(list(wrong))}\n" for name, wrong in boards.items())
    bench.write_text(bench.read_text("utf-8") + listed, "utf-8")
    return folder


def tried(folder: Path, *serials: str) -> dict[str, tuple[Done, Record]]:
    """Every one of these boards, on one bench; the first with its report."""
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    found = {}
    with opened(inputs, QUIET) as bench:
        for serial in serials:
            done = run_board(bench, inputs.job, serial, folder / "runs" / serial, QUIET)
            assert not isinstance(done.error, NotConfirmedOff)
            if serial == serials[0]:
                write_report(done.folder, done.evaluation)
            found[serial] = done, read_record(done.folder)
    return found
