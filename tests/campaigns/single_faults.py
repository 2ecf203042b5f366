"""Each single fault of a part, on each of the nine topologies: is any of them passed?

    python -m tests.campaigns.single_faults [TOPOLOGY...]

A sound board of every topology is measured with all the trials that its stage can have, and must
pass; then the same with one fault of a part, which must not. What cannot be seen from the terminals
is listed with its reason in UNSEEN, and has to be passed (else the list is wrong). The last line is
a JSON object: ``boards``, ``sound_passed``, ``faulty``, ``passed`` (without a reason), ``unseen``.
"""

from __future__ import annotations

import json
import sys
import tempfile
import time
from collections.abc import Iterator, Sequence
from pathlib import Path

from benchkit.files import StageFile, load
from benchkit.stage import build_stage
from instruments.simulated.board_faults import check_faults, parse_faults
from procedures.commands import opened
from procedures.screen import Screen
from procedures.verify import run_board
from tests.benchkit.nine_stages import STAGES, text
from tests.clamp_shop import FUSED, FUSED_LIMITS, LIMITS, REVERSE
from tests.clamp_shop import stage_text as clamps
from tests.simulated_bench import inputs_of, workshop

SOUND = "sound"
FAULTS = (
    "short", "open", "leaky=2000", "wrong-way-round", "wrong-part=1.5", "dry-joint=0.1",
    "gate-open", "gate-shorted", "rds-on-scale=3", "fuse-missing", "fuse-blown",
    "fuse-too-large=3", "fuse-bridged", "zener-open", "zener-short", "sense-open", "sense-short",
    "base-open", "hold-open",
)  # fmt: skip
"""Each as a bench file spells it; a part that a topology does not have is left out there."""
FLOATS = (
    "the resistor only discharges the gate; without it the gate floats, and keeps what it had for "
    "as long as a trial lasts"
)
UNSEEN = {("pmos-sensed", "hold-open"): FLOATS, ("nmos-sensed", "hold-open"): FLOATS}
"""(topology, fault): why it cannot be seen from the terminals."""

LADDER = "[reverse]\nsteps = 2\ndwell_s = 1.0\n"
SUPPLY = "[supply_sweep]\nvoltages_V = [2.2, 2.6, 3.0, 3.5, 4.0, 5.0, 7.0, 9.0, 12.0, 15.0]\n"
BATTERY = "[battery_trial]\ndwell_s = 1.0\n"
TABLES = {
    "series-diode": LADDER,
    "pass": LADDER + SUPPLY,
    "sensed": LADDER + SUPPLY + BATTERY,
}
DROPS = {"series-diode": 0.5, "pass": 0.09, "sensed": 0.09}
"""What a sound board drops at most at 2 A."""
CLAMP_LIMITS = "drop = [{ current_A = 0.6, max_V = 0.08 }]\n"


def stage_text(topology: str) -> str:
    """A stage with every trial that it can have."""
    if topology == "clamp":
        return clamps(REVERSE + LIMITS + CLAMP_LIMITS, "clamp")
    if topology == "fused-clamp":
        return clamps(REVERSE + FUSED + LIMITS + FUSED_LIMITS + CLAMP_LIMITS)
    kind = topology if topology in TABLES else topology.split("-")[1]
    limits = f"[limits]\ndrop = [{{ current_A = 2.0, max_V = {DROPS[kind]} }}]\n"
    return text(topology, tables=TABLES[kind]) + limits


def faults_of(path: Path) -> Iterator[str]:
    """Those that this stage can have."""
    stage = build_stage(load(StageFile, path), str(path))
    for fault in FAULTS:
        try:
            check_faults(stage, parse_faults([fault]), str(path))
        except ValueError:
            continue
        except Exception as error:
            if "cannot be given" in str(error):
                continue
            raise
        yield fault


def measured(
    folder: Path, topology: str, only: Sequence[str] | None = None
) -> Iterator[tuple[str, str, str]]:
    """(fault, verdict, the first reason) of a sound board and of every faulty one."""
    workshop(folder, supply="supply-select", trial=True)
    (folder / "mine.toml").write_text(stage_text(topology), encoding="utf-8")
    faults = [SOUND, *(f for f in faults_of(folder / "mine.toml") if only is None or f in only)]
    boards = {fault: f"N-{number}" for number, fault in enumerate(faults)}
    listed = "".join(
        f'{serial} = ["{fault}"]\n' for fault, serial in boards.items() if fault != SOUND
    )
    bench = (folder / "bench.toml").read_text(encoding="utf-8")
    head, _, _ = bench.partition("[simulated.boards]")
    (folder / "bench.toml").write_text(f"{head}[simulated.boards]\n{listed}", encoding="utf-8")
    inputs, screen = inputs_of(folder, "mine.toml"), Screen(quiet=True)
    for fault, serial in boards.items():
        # A board that stopped a run may have left the bench otherwise: each has its own.
        with opened(inputs, screen) as bench_open:
            done = run_board(bench_open, inputs.job, serial, folder / serial, screen)
        result = done.evaluation.result
        yield fault, result.verdict, result.why[0] if result.why else ""


def campaign(topologies: Sequence[str]) -> dict[str, object]:
    """Every pair; prints each."""
    began = time.perf_counter()
    sound = faulty = passed = unseen = 0
    with tempfile.TemporaryDirectory() as place:
        for topology in topologies:
            for fault, verdict, why in measured(Path(place) / topology, topology):
                reason = UNSEEN.get((topology, fault))
                if fault == SOUND:
                    sound += verdict == "pass"
                else:
                    faulty += 1
                    unseen += reason is not None
                    passed += (verdict == "pass") != (reason is not None)
                told = f"not seen: {reason}" if reason else why
                print(f"{topology:16} {fault:18} {verdict:10} {told}", flush=True)
    return {
        "boards": len(topologies) + faulty, "sound_passed": sound, "faulty": faulty,
        "passed": passed, "unseen": unseen, "seconds": round(time.perf_counter() - began, 1),
    }  # fmt: skip


if __name__ == "__main__":
    print(json.dumps(campaign(sys.argv[1:] or list(STAGES))))
