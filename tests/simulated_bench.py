"""A folder with starter files for tests: quick link timeouts, a small lot, faults on request."""

from __future__ import annotations

import re
from collections.abc import Sequence
from importlib.resources import files
from pathlib import Path

from benchkit.errors import BenchkitError
from benchkit.files import BenchFile, load
from benchkit.files.trial_checks import MEASURED_IN
from instruments.bench import Bench
from procedures.commands import opened
from procedures.inputs import BoardInputs, read_board
from procedures.screen import Screen
from procedures.starters import place_starters
from procedures.verify import Done, run_board, write_report

GOOD, UNDRIVEN, MARGINAL = "TG-0101", "TG-0106", "TG-0111"
QUICK = {"identify_s": 0.5, "set_s": 0.5, "read_s": 0.5, "slow_s": 1.0, "open_s": 1.0}


TABLES = "reverse|supply_sweep|battery_trial|fused_trial"


def without_trial(folder: Path) -> None:
    """Take the trials out of a folder's stages: most tests are about something else."""
    limits = "|".join(MEASURED_IN)
    for name in ("stage.toml", "stage-diode.toml"):
        text = (folder / name).read_text(encoding="utf-8")
        text, tables = re.subn(rf"(?ms)^\[({TABLES})\].*?\n\n", "", text)
        text, lines = re.subn(rf"(?m)^({limits}) =.*\n", "", text)
        assert tables >= 1, name
        assert lines >= 1, name
        (folder / name).write_text(text, encoding="utf-8")


def workshop(
    folder: Path, *, faults: Sequence[str] = (), supply: str = "supply-list", trial: bool = False
) -> Path:
    """Starter files in ``folder``, with dialects whose timeouts suit a test; returns it.

    trial: with the reverse trial.
    """
    place_starters(folder)
    if not trial:
        without_trial(folder)
    bench = folder / "bench.toml"
    text = bench.read_text(encoding="utf-8")
    text = text.replace('dialect = "supply-list"', f'dialect = "{supply}"')
    if supply == "supply-plain":
        text = text.replace('channel = "1"\n', "")
    own = (supply, "supply-plain", "load-plain", "meter-scan", "thermometer-scan")
    for name in dict.fromkeys(own):
        shipped = files("instruments.dialects").joinpath(f"{name}.toml").read_text("utf-8")
        for key, value in QUICK.items():
            shipped, count = re.subn(rf"(?m)^{key} = [\d.]+", f"{key} = {value}", shipped)
            assert count == 1, (name, key)
        (folder / f"{name}-quick.toml").write_text(shipped, encoding="utf-8")
        text = text.replace(f'"{name}"', f'"{name}-quick.toml"')
    if faults:
        spelled = ", ".join(f'"{fault}"' for fault in faults)
        text = text.replace("[simulated.boards]", f"faults = [{spelled}]\n\n[simulated.boards]")
    bench.write_text(text, encoding="utf-8")
    load(BenchFile, bench)
    return folder


def inputs_of(folder: Path, stage: str = "stage.toml") -> BoardInputs:
    return read_board(folder / stage, folder / "bench.toml")


def measure(
    folder: Path, serial: str = GOOD, stage: str = "stage.toml", run: str = "run"
) -> tuple[Done, Bench]:
    """One board on the simulated bench, in this process but over its sockets."""
    inputs, screen = inputs_of(folder, stage), Screen(quiet=True)
    with opened(inputs, screen) as bench:
        done = run_board(bench, inputs.job, serial, folder / run, screen)
    write_report(done.folder, done.evaluation)
    return done, bench


def failure(done: Done) -> BenchkitError:
    assert done.error is not None
    return done.error
