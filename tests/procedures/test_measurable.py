"""What is measured so far is measured; the rest is refused before any bench is opened."""

from __future__ import annotations

from pathlib import Path

import pytest
from typer.testing import CliRunner

from benchkit.errors import InputError
from benchkit.records.record import read_json
from benchkit.records.run_folder import hashes
from procedures import commands
from procedures.cli import app
from procedures.inputs import read_board
from tests.benchkit.nine_stages import PARTS, STAGES, text
from tests.simulated_bench import GOOD, measure, workshop

LEAD = 'kind = "lead"\nvalue_ohm = 0.01\n'
LIMITS = """
[soak]
current_A = 2.0
[limits]
drop = [{ current_A = 2.0, max_V = 0.08 }, { current_A = 3.0, max_V = 0.12 }]
case_max_C = 60
junction_margin_min_K = 30
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return workshop(tmp_path / "w", trial=True)


def refused(folder: Path, stage: str, monkeypatch: pytest.MonkeyPatch) -> str:
    """The one sentence that `verify` refuses a stage with; a bench that is opened is an error."""

    def no_bench(*_: object) -> None:
        raise AssertionError("a bench was opened")

    monkeypatch.setattr(commands, "opened", no_bench)
    path = folder / "mine.toml"
    path.write_text(stage, encoding="utf-8")
    before = sorted(folder.iterdir())
    ran = CliRunner().invoke(app, [
        "verify", str(path), "--bench", str(folder / "bench.toml"), "--serial", GOOD,
        "--out", str(folder / "out"),
    ])  # fmt: skip
    assert ran.exit_code == 2, ran.output
    assert sorted(folder.iterdir()) == before
    with pytest.raises(InputError) as caught:
        read_board(path, folder / "bench.toml")
    [line] = str(caught.value).splitlines()
    assert line in " ".join(ran.stderr.split())
    return line.removeprefix(f"{path}: ")


def test_a_circuit_of_one_s_own_is_predicted_and_not_measured(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    stage = (folder / "stage-network.toml").read_text("utf-8")
    said = refused(folder, stage, monkeypatch)
    assert said.startswith('stage.topology is "network": a circuit of your own is predicted')


def test_a_clamp_is_not_soaked(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    said = refused(folder, text("clamp") + "[soak]\ncurrent_A = 1.0\n", monkeypatch)
    assert said.startswith("soak is given, but in a clamp the working current does not flow")


@pytest.mark.parametrize(
    ("parts", "named", "left_out"),
    [
        ({"F1": PARTS["fuse"]}, "F1", "F1"),
        ({"W1": LEAD}, "W1", "W1"),
        ({"W1": LEAD, "F1": PARTS["fuse"]}, "F1", "F1 and W1"),
    ],
)
def test_a_part_whose_drop_would_be_taken_for_the_main_part_s_is_refused(
    parts: dict[str, str], named: str, left_out: str, folder: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    soaked = text("pmos-pass", **parts) + "[soak]\ncurrent_A = 1.0\n"
    assert refused(folder, soaked, monkeypatch) == (
        f"parts.{named} is in the way of the current: its heat would be taken for that of Q1. "
        "Leave [soak] out, or put the drop point's taps across Q1 and measure with a file that "
        f"leaves {left_out} out"
    )


@pytest.mark.parametrize("topology", sorted(STAGES))
def test_what_is_measured_is_planned(topology: str, folder: Path) -> None:
    path = folder / "mine.toml"
    path.write_text(text(topology), encoding="utf-8")
    assert read_board(path, folder / "bench.toml").job.plan.steps
    assert topology in STAGES


@pytest.mark.parametrize("topology", ["pmos-pass-zener", "nmos-pass", "nmos-pass-zener"])
def test_a_switch_in_either_lead_is_measured_and_passes(topology: str, folder: Path) -> None:
    (folder / "mine.toml").write_text(text(topology) + LIMITS, encoding="utf-8")
    done, _ = measure(folder, stage="mine.toml")
    assert done.error is None
    result = done.evaluation.result
    assert result.verdict == "pass", result.why
    judged = [row.name for row in result.measurands if row.verdict]
    assert judged == ["drop", "drop", "warm_drop", "case_hottest", "junction_margin"]
    fitted = {"Q1", "R1", "Z1"} if topology.endswith("zener") else {"Q1", "R1"}
    assert {row["part"] for row in result.ratings} >= fitted
    assert read_json(done.folder / "manifest.json")["sha256"] == hashes(done.folder)
