"""The demo is what a stranger sees first: right verdicts, in words, and files that exist."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest

import procedures.demo as demo_module
from procedures.demo import run_demo
from procedures.starters import place_starters, starter

BOARDS = ["TG-0101", "TG-0106", "TG-0111"]


def test_demo(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Of its lot of twelve three boards: the whole of it is what the README's first line runs."""

    def few(folder: Path, seed: int | None = None) -> None:
        place_starters(folder, seed)
        lot = (folder / "lot.toml").read_text("utf-8")
        lot, count = re.subn(r"(?s)serials = \[.*?\]", f"serials = {json.dumps(BOARDS)}", lot)
        assert count == 1
        (folder / "lot.toml").write_text(lot, "utf-8")

    monkeypatch.setattr(demo_module, "place_starters", few)
    monkeypatch.setenv("COLUMNS", "100")
    assert run_demo(tmp_path / "d", None) == 0
    said = capsys.readouterr().out
    document = json.loads((tmp_path / "d" / "lot" / "lot.json").read_text("utf-8"))
    boards = {board["serial"]: board for board in document["boards"]}
    found = {serial: b["verdict"] for serial, b in boards.items()}
    assert found == {"TG-0101": "pass", "TG-0106": "fail", "TG-0111": "undecided"}
    assert "gate is not driven" in " ".join(boards["TG-0106"]["why"])
    told = [line.strip() for line in said.splitlines() if line.strip().endswith(".html")]
    pages = [line for line in told if "/SERIAL/" not in line]
    assert len(pages) >= 5
    for page in pages:
        assert Path(page.split("  ")[-1].strip()).is_file(), page
    assert "lot/lot.html" in said
    assert "gate is not" in said


def test_the_demo_has_a_lot_worth_the_name() -> None:
    serials = re.search(r"(?s)serials = \[(.*?)\]", starter("lot.toml"))
    assert serials is not None
    assert len(re.findall(r"TG-\d+", serials[1])) >= 12
