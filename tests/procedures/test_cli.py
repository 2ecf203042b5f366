"""The command line as a user meets it: exit codes, one clear sentence, nothing half-written."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.simulated_bench import GOOD, workshop

ROOT = Path(__file__).parents[2]


def start(*arguments: str, cwd: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "procedures", *arguments],
        cwd=cwd,
        env={**os.environ, "PYTHONPATH": str(ROOT), "COLUMNS": "100"},
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def run(*arguments: str, cwd: Path) -> tuple[int, str, str]:
    process = start(*arguments, cwd=cwd)
    out, err = process.communicate(timeout=120)
    assert "Traceback" not in err, err
    return process.returncode, out, err


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return workshop(tmp_path / "w")


def test_new_writes_files_that_run_and_never_overwrites(tmp_path: Path) -> None:
    code, out, _ = run("new", "mine", cwd=tmp_path)
    assert code == 0
    assert "bench.toml" in out
    before = (tmp_path / "mine" / "bench.toml").read_bytes()
    code, _, err = run("new", "mine", cwd=tmp_path)
    assert code == 2
    assert "is there already" in err
    assert (tmp_path / "mine" / "bench.toml").read_bytes() == before
    for stage in ("stage.toml", "stage-diode.toml"):
        code, _, _ = run("predict", f"mine/{stage}", cwd=tmp_path)
        assert code == 0


def test_predict_json_has_the_contract_s_keys(folder: Path) -> None:
    code, out, err = run("predict", "stage.toml", "--json", cwd=folder)
    assert code == 0
    assert err == ""
    document = json.loads(out)
    assert {"stage", "topology", "conditions", "drop", "scenarios", "heat"} <= set(document)
    assert set(document["drop"][0]) >= {
        "current_A", "supply_V", "ambient_C", "nominal_V", "low_V", "high_V", "loss_W",
    }  # fmt: skip
    assert set(document["heat"]) >= {"case_C", "junction_C", "derating"}
    assert 3 < document["lowest_useful_supply_V"] < 8
    right = document["scenarios"]["right-way"]
    assert set(right) >= {"exposed_current_A", "guarded_V", "parts", "ratings", "notes"}
    assert set(right["parts"]["Q1"]) == {"voltage_V", "current_A", "power_W"}
    assert set(right["ratings"][0]) == {
        "part", "rating", "unit", "value", "limit", "margin", "holds",
    }  # fmt: skip


def test_dry_run_opens_nothing_and_writes_nothing(folder: Path) -> None:
    before = sorted(folder.iterdir())
    arguments = ("verify", "stage.toml", "--bench", "bench.toml", "--serial", GOOD, "--dry-run")
    code, out, _ = run(*arguments, cwd=folder)
    assert code == 0
    for words in ("forward sweep", "soak", "current limit 5.55 A", "caution", "polarity", "fuse"):
        assert words in out
    code, out, _ = run(*arguments, "--json", cwd=folder)
    assert code == 0
    document = json.loads(out)
    assert document["fuses_at_risk"] == 0
    assert document["seconds"] > 600
    assert sorted(folder.iterdir()) == before


def test_verify_json_prints_one_document_and_keeps_retests(folder: Path) -> None:
    arguments = ("verify", "stage.toml", "--bench", "bench.toml", "--serial", GOOD, "--out", "o")
    code, out, _ = run(*arguments, "--json", cwd=folder)
    assert code == 0
    document = json.loads(out)
    assert document["verdict"] == "pass"
    assert document == json.loads((folder / "o" / GOOD / "result.json").read_text("utf-8"))
    code, out, _ = run(*arguments, cwd=folder)
    assert code == 0
    assert f"{GOOD}  " in out
    assert (folder / "o" / f"{GOOD}.retest-1" / "report.html").is_file()
    (folder / "o" / GOOD / "inputs" / "stage.toml").write_bytes(
        (folder / "stage.toml").read_bytes() + b"\n"
    )
    code, out, _ = run("audit", "o/TG-0101", f"o/{GOOD}.retest-1", cwd=folder)
    assert code == 1
    assert "inputs/stage.toml was changed after the run" in out
    assert out.count("whole") == 1


BAD = {
    "no such stage": (["predict", "nothing.toml"], "nothing.toml: there is no such file"),
    "not toml": (["predict", "broken.toml"], "broken.toml: is not valid TOML"),
    "not a run": (["report", "."], "is neither a run folder nor a lot's folder"),
    "bad serial": (
        ["verify", "stage.toml", "--bench", "bench.toml", "--serial", "../x"],
        "cannot be a serial",
    ),
    "no bench": (
        ["verify", "stage.toml", "--bench", "none.toml", "--serial", "A"],
        "none.toml: there is no such file",
    ),
    "no option": (["verify", "stage.toml"], "--bench"),
    "no command": (["measure"], "measure"),
    "speed": (["simulate", "bench.toml", "--speed", "0"], "--speed is 0"),
    "lot without stage": (
        ["batch", "lost.toml", "--bench", "bench.toml"],
        "lot.stage is 'no.toml'",
    ),
}


@pytest.mark.parametrize("case", sorted(BAD))
def test_bad_input_is_exit_2_with_one_sentence(case: str, folder: Path) -> None:
    (folder / "broken.toml").write_text("[stage\n")
    (folder / "lost.toml").write_text('[lot]\nname = "L"\nstage = "no.toml"\nserials = ["A"]\n')
    before = sorted(folder.iterdir())
    arguments, words = BAD[case]
    code, out, err = run(*arguments, cwd=folder)
    assert code == 2
    assert words in err
    assert out == ""
    assert sorted(folder.iterdir()) == before


def test_every_mistake_of_both_files_at_once(folder: Path) -> None:
    stage = (folder / "stage.toml").read_text().replace("supply_max_V = 15.0", "supply_max = 15.0")
    (folder / "stage.toml").write_text(stage)
    bench = (folder / "bench.toml").read_text().replace("poll_s = 1.0", 'poll_s = "1 s"')
    (folder / "bench.toml").write_text(bench)
    arguments = ("verify", "stage.toml", "--bench", "bench.toml", "--serial", "A")
    code, _, err = run(*arguments, cwd=folder)
    assert code == 2
    assert "stage.supply_max is not a key here; the nearest right one is supply_max_V" in err
    assert "bench.poll_s is '1 s'" in err


def test_a_stage_too_much_for_the_bench_is_refused_before_it_is_opened(folder: Path) -> None:
    bench = (folder / "bench.toml").read_text().replace("current_max_A = 10.0", "current_max_A = 3")
    (folder / "bench.toml").write_text(bench)
    arguments = ("verify", "stage.toml", "--bench", "bench.toml", "--serial", "A", "--out", "o")
    code, _, err = run(*arguments, cwd=folder)
    assert code == 2
    assert "above bench.current_max_A = 3 of the bench file" in err
    assert not (folder / "o").exists()


@pytest.fixture
def served(folder: Path) -> Iterator[Path]:
    """`simulate` in real time, and a bench file that takes its instruments for real ones."""
    process = start("simulate", "bench.toml", "--speed", "50", cwd=folder)
    try:
        assert process.stdout is not None
        text = (folder / "bench.toml").read_text()
        text = text[: text.index("\n[simulated]\n")]
        for line in process.stdout:
            if line.startswith("in real time"):
                break
            name, resource = line.split()
            if name != "control":
                text = text.replace('resource = "simulated"', f'resource = "{resource}"', 1)
        (folder / "real.toml").write_text(text)
        yield folder
        process.send_signal(signal.SIGINT)
        assert process.wait(10) == 0
    finally:
        process.kill()
        process.communicate()


def test_a_real_bench_wants_a_person(served: Path) -> None:
    """Standard input that is no terminal cannot acknowledge a caution."""
    arguments = ("verify", "stage.toml", "--bench", "real.toml", "--serial", "A", "--out", "o")
    code, _, err = run(*arguments, cwd=served)
    assert code == 2
    assert "needs a person at a terminal" in err
    assert not (served / "o").exists()


@pytest.mark.parametrize("name", ["SIGTERM", "SIGINT", "SIGHUP"])
def test_a_signal_switches_off_first_and_is_exit_3(name: str, folder: Path) -> None:
    arguments = ("verify", "stage.toml", "--bench", "bench.toml", "--serial", GOOD, "--out", "o")
    process = start(*arguments, cwd=folder)
    events = folder / "o" / GOOD / "events.jsonl"
    deadline = time.monotonic() + 60
    while not (events.exists() and "sweep/1/up" in events.read_text("utf-8")):
        assert time.monotonic() < deadline
        assert process.poll() is None
        time.sleep(0.005)
    process.send_signal(getattr(signal, name))
    _, err = process.communicate(timeout=60)
    assert process.returncode == 3, err
    assert f"stopped by {name}" in err
    assert "Traceback" not in err
    lines = [json.loads(line) for line in events.read_text("utf-8").splitlines()]
    kinds = [line["kind"] for line in lines]
    assert kinds[-1] == "off"
    assert "stopped" in kinds
    result = json.loads((folder / "o" / GOOD / "result.json").read_text("utf-8"))
    assert result["verdict"] == "undecided"


def test_two_simulated_benches_can_be_served_at_once(served: Path) -> None:
    second = start("simulate", "bench.toml", cwd=served)
    try:
        assert second.stdout is not None
        lines = [second.stdout.readline() for _ in range(7)]
        assert lines[-1].startswith("in real time")
        first = (served / "real.toml").read_text()
        assert not any(line.split()[1] in first for line in lines[:5])
    finally:
        second.kill()
        second.communicate()
