"""`new`: the starter files, as they are shipped."""

from __future__ import annotations

import sys
from importlib.resources import files
from pathlib import Path

from benchkit.errors import InputError

NAMES = (
    "bench.toml", "stage.toml", "stage-diode.toml", "stage-charger.toml", "stage-clamp.toml",
    "stage-network.toml", "lot.toml",
)  # fmt: skip


def starter(name: str) -> str:
    """The text of a starter file."""
    return files("benchkit.files.starters").joinpath(name).read_text(encoding="utf-8")


def write_starters(directory: Path, *, seed: int | None = None) -> int:
    """Write them all, or none: InputError when one is there already."""
    there = [name for name in NAMES if (directory / name).exists()]
    if there:
        raise InputError(
            f"{directory}: {', '.join(there)} is there already; give an empty or new directory"
        )
    place_starters(directory, seed)
    say = sys.stdout.write
    for name in NAMES:
        say(f"{directory / name}\n")
    say(
        "they run as they are, on the simulated bench; try\n"
        f"  benchkit predict {directory / 'stage.toml'}\n"
        f"  benchkit verify {directory / 'stage.toml'} --bench {directory / 'bench.toml'} "
        "--serial TG-0101\n"
        f"  benchkit batch {directory / 'lot.toml'} --bench {directory / 'bench.toml'}\n"
    )
    return 0


def place_starters(directory: Path, seed: int | None = None) -> None:
    """Write the files; ``seed`` replaces the simulated bench's."""
    try:
        directory.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"{directory}: cannot be made a directory: {error.strerror}") from None
    for name in NAMES:
        text = starter(name)
        if seed is not None and name == "bench.toml":
            lines = [
                f"seed = {seed}" if line.startswith("seed = ") else line
                for line in text.splitlines()
            ]
            text = "\n".join(lines) + "\n"
        (directory / name).write_text(text, encoding="utf-8")
