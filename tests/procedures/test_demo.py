"""The demo is what a stranger sees first: right verdicts, in words, and files that exist."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[2]


def test_demo(tmp_path: Path) -> None:
    done = subprocess.run(
        [sys.executable, "-m", "procedures", "demo", "--out", "d"],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(ROOT), "COLUMNS": "100"},
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    document = json.loads((tmp_path / "d" / "lot" / "lot.json").read_text("utf-8"))
    boards = {board["serial"]: board for board in document["boards"]}
    assert len(boards) >= 12
    found = {serial: b["verdict"] for serial, b in boards.items() if b["verdict"] != "pass"}
    assert found == {"TG-0106": "fail", "TG-0111": "undecided"}
    assert "gate is not driven" in " ".join(boards["TG-0106"]["why"])
    for line in done.stdout.splitlines():
        name = line.strip()
        if name.startswith("d/") and name.endswith(".html"):
            assert (tmp_path / name).is_file()
    assert "d/lot/lot.html" in done.stdout
    assert "gate is not" in done.stdout
