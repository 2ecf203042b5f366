"""A lot: interrupted and resumed, with a board that trips, with retests kept apart."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from benchkit.errors import InputError
from procedures.batch import Lot, prepare
from procedures.commands import batch_lot
from tests.simulated_bench import workshop

SERIALS = ("TG-0101", "TG-0106", "TG-0102", "TG-0111")


def small_lot(folder: Path) -> Path:
    lot = workshop(folder) / "lot.toml"
    listed = ", ".join(f'"{serial}"' for serial in SERIALS)
    text = re.sub(r"serials = \[.*?\]", f"serials = [{listed}]", lot.read_text(), flags=re.S)
    lot.write_text(text)
    return lot


def run(folder: Path, out: Path, *, resume: bool = False) -> int:
    return batch_lot(
        folder / "lot.toml", folder / "bench.toml", out, resume=resume, dry_run=False, as_json=True
    )


@pytest.fixture(scope="module")
def unbroken(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = small_lot(tmp_path_factory.mktemp("lot") / "w").parent
    assert run(folder, folder / "out") == 1
    return folder / "out"


def verdicts(out: Path) -> dict[str, str]:
    document = json.loads((out / "lot.json").read_text("utf-8"))
    return {board["serial"]: board["verdict"] for board in document["boards"]}


def test_verdicts_of_the_lot(unbroken: Path) -> None:
    assert verdicts(unbroken) == {
        "TG-0101": "pass",
        "TG-0106": "fail",
        "TG-0102": "pass",
        "TG-0111": "undecided",
    }
    page = (unbroken / "lot.html").read_text("utf-8")
    for serial in SERIALS:
        assert f"boards/{serial}/report.html" in page
        assert (unbroken / "boards" / serial / "report.html").is_file()
    assert "gate is not driven" in page


def children_of(pid: int) -> list[int]:
    """Processes that a process began, those of its threads too; none where there is no /proc."""
    tasks = Path(f"/proc/{pid}/task").glob("*/children")
    return [int(child) for task in tasks for child in task.read_text("ascii").split()]


def alive(pid: int) -> bool:
    try:
        state = Path(f"/proc/{pid}/stat").read_text("ascii").rsplit(")", 1)[1].split()[0]
    except OSError:
        return False
    return state != "Z"


@pytest.mark.skipif(not Path("/proc/self/task").exists(), reason="looks at processes in /proc")
def test_a_killed_batch_goes_on_and_ends_the_same(unbroken: Path, tmp_path: Path) -> None:
    folder = small_lot(tmp_path / "w").parent
    out = folder / "out"
    command = [sys.executable, "-m", "procedures", "batch", "lot.toml", "--bench", "bench.toml"]
    root = Path(__file__).parents[2]
    process = subprocess.Popen(
        [*command, "--out", str(out), "--json"],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(root)},
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    second = out / "boards" / SERIALS[1] / "readings.csv"
    deadline = time.monotonic() + 60
    while not second.exists() or second.stat().st_size < 4000:
        assert process.poll() is None, "it ended before it could be killed"
        assert time.monotonic() < deadline
        time.sleep(0.01)
    drawing = children_of(process.pid)
    assert drawing
    process.send_signal(signal.SIGKILL)
    process.wait()
    assert not (out / "lot.json").exists()

    with pytest.raises(InputError, match="--resume"):
        run(folder, out)
    assert run(folder, out, resume=True) == 1
    # What drew its reports, and served its bench, ended with it.
    deadline = time.monotonic() + 20
    while any(alive(child) for child in drawing):
        assert time.monotonic() < deadline
        time.sleep(0.05)
    assert verdicts(out) == verdicts(unbroken)
    assert (out / "lot.html").read_bytes() == (unbroken / "lot.html").read_bytes()
    assert (out / "lot.json").read_bytes() == (unbroken / "lot.json").read_bytes()
    for serial in SERIALS:
        for name in ("readings.csv", "result.json"):
            ours = out / "boards" / serial / name
            assert ours.read_bytes() == (unbroken / "boards" / serial / name).read_bytes()
            assert (out / "boards" / serial / "report.html").is_file()
    # What was cut short is kept, readable, and does not count.
    aside = out / "boards" / f"{SERIALS[1]}.unfinished-1"
    assert (aside / "readings.csv").stat().st_size >= 4000


def test_resume_of_a_finished_lot_measures_nothing(unbroken: Path, tmp_path: Path) -> None:
    lot = Lot("x", SERIALS, unbroken)
    assert prepare(lot, resume=True) == []
    assert prepare(Lot("x", SERIALS, tmp_path / "new"), resume=False) == list(SERIALS)


def test_a_lost_instrument_ends_the_lot_with_its_exit_code(tmp_path: Path) -> None:
    folder = small_lot(tmp_path / "w").parent
    bench = folder / "bench.toml"
    text = bench.read_text("utf-8")
    text = text.replace(
        "[simulated.boards]", 'faults = ["dropped-peer:load@3.0"]\n\n[simulated.boards]'
    )
    bench.write_text(text, "utf-8")
    out = folder / "out"
    assert run(folder, out) == 3
    document = json.loads((out / "lot.json").read_text("utf-8"))
    assert document["boards"] == []
    assert document["missing"] == list(SERIALS)
    assert document["verdict"] == "undecided"
