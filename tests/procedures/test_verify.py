"""One board through real sockets: figures, verdicts in words, record, report, audit."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest

from benchkit.audit import audit
from benchkit.evaluation.evaluate import evaluate
from benchkit.records.record import read_json, read_record
from benchkit.records.run_folder import hashes
from procedures.verify import write_report
from tests.simulated_bench import GOOD, MARGINAL, UNDRIVEN, measure, workshop

KEYS = {
    "name", "unit", "condition", "predicted", "measured", "U", "k", "limit", "verdict", "en",
}  # fmt: skip


@pytest.fixture(scope="module")
def good(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = workshop(tmp_path_factory.mktemp("good") / "w")
    done, _ = measure(folder)
    assert done.error is None
    return done.folder


def test_a_good_board_passes_and_its_folder_is_whole(good: Path) -> None:
    result = read_json(good / "result.json")
    assert result["verdict"] == "pass"
    names = {path.name for path in good.iterdir()}
    assert names == {
        "readings.csv", "events.jsonl", "traffic.log", "inputs", "result.json", "manifest.json",
        "report.html",
    }  # fmt: skip
    assert {p.name for p in (good / "inputs").iterdir()} == {"bench.toml", "stage.toml"}
    rows = result["measurands"]
    assert isinstance(rows, list)
    for row in rows:
        assert set(row) >= KEYS
        assert row["U"] > 0
        assert 1.5 < row["k"] < 3.5
    judged = [row["name"] for row in rows if row["verdict"]]
    assert judged == ["drop", "drop", "warm_drop", "case_hottest", "junction_margin"]
    assert audit(good) == []


def test_the_manifest_says_with_what(good: Path) -> None:
    manifest = read_json(good / "manifest.json")
    assert manifest["status"] == "finished"
    assert manifest["sha256"] == hashes(good)
    instruments = manifest["instruments"]
    assert isinstance(instruments, dict)
    assert instruments["meter"]["identity"].startswith("Murrelet,SM-6")
    assert instruments["meter"]["calibration_due"] == "2027-05-31"


def test_every_reading_carries_its_unit_uncertainty_and_range(good: Path) -> None:
    record = read_record(good)
    assert len(record.readings) > 500
    for _, reading in record.readings:
        assert reading.status == "ok"
        if not reading.point.startswith("supply_"):
            assert reading.u > 0
    drops = record.at("sweep/1/up/3.0", "drop")
    assert drops[0].range == 1.0
    assert 0.04 < drops[0].value < 0.08


def test_traffic_has_every_message_both_ways(good: Path) -> None:
    lines = (good / "traffic.log").read_text("utf-8").splitlines()
    sent = sum(" > " in line for line in lines)
    got = sum(" < " in line for line in lines)
    assert sent - got in range(40)  # switching off is sent blind, before it is confirmed
    assert any(":OUTP ON,(@1)" in line for line in lines)


def test_two_runs_of_one_seed_give_the_same_bytes(good: Path, tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w"))
    for name in ("readings.csv", "result.json"):
        assert (done.folder / name).read_bytes() == (good / name).read_bytes()


@pytest.mark.parametrize("supply", ["supply-plain", "supply-select"])
def test_the_other_supply_families_measure_the_same_board(
    supply: str, good: Path, tmp_path: Path
) -> None:
    done, _ = measure(workshop(tmp_path / "w", supply=supply))
    assert done.error is None
    assert done.evaluation.result.verdict == "pass"
    ours, theirs = (
        next(m for m in read_json(f / "result.json")["measurands"] if "3 A" in m["condition"])  # type: ignore[attr-defined]
        for f in (done.folder, good)
    )
    assert ours["measured"] == pytest.approx(theirs["measured"], abs=theirs["U"])


def test_the_report_is_rebuilt_from_the_record_alone(good: Path, tmp_path: Path) -> None:
    copy = tmp_path / "elsewhere"
    shutil.copytree(good, copy)
    before = (copy / "report.html").read_bytes()
    (copy / "report.html").unlink()
    write_report(copy)
    assert (copy / "report.html").read_bytes() == before


def test_a_changed_byte_and_a_changed_figure_are_found(good: Path, tmp_path: Path) -> None:
    copy = tmp_path / "copy"
    shutil.copytree(good, copy)
    text = (copy / "readings.csv").read_text("utf-8")
    number = text.index("sweep/1/up/3.0,drop,0.0") + len("sweep/1/up/3.0,drop,0.0")
    changed = text[:number] + ("9" if text[number] != "9" else "1") + text[number + 1 :]
    (copy / "readings.csv").write_text(changed, "utf-8")
    told = audit(copy)
    assert "readings.csv was changed after the run" in told
    assert any("measured" in line and "but the readings give" in line for line in told)

    copy = tmp_path / "copy2"
    shutil.copytree(good, copy)
    document = json.loads((copy / "result.json").read_text("utf-8"))
    document["verdict"] = "fail"
    (copy / "result.json").write_text(json.dumps(document), "utf-8")
    told = audit(copy)
    assert "result.json was changed after the run" in told
    assert "result.verdict is recorded as 'fail', but the readings give 'pass'" in told
    (copy / "traffic.log").unlink()
    assert "traffic.log is missing" in audit(copy)


def test_a_record_cut_short_can_still_be_read(good: Path, tmp_path: Path) -> None:
    copy = tmp_path / "copy"
    shutil.copytree(good, copy)
    text = (copy / "readings.csv").read_bytes()
    (copy / "readings.csv").write_bytes(text[: text.index(b"sweep/1/up/4.0") + 30])
    record = read_record(copy)
    evaluation = evaluate(record, GOOD)
    assert evaluation.result.verdict == "undecided"


def test_an_undriven_gate_fails_and_is_named(tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w"), UNDRIVEN)
    result = done.evaluation.result
    assert done.error is None
    assert result.verdict == "fail"
    words = " ".join(result.why)
    assert "drops like a diode" in words
    assert "gate is not driven" in words
    assert any("the soak was left out" in line for line in result.not_tested)


def test_a_marginal_board_is_undecided(tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w"), MARGINAL)
    result = done.evaluation.result
    assert result.verdict == "undecided"
    assert any("too close to" in line for line in result.why)
    row = next(m for m in result.measurands if m.verdict == "undecided")
    assert row.conformity is not None
    assert 0.02 < row.conformity < 0.98


@pytest.mark.parametrize(
    ("fault", "words"),
    [
        ("short", "drops next to nothing"),
        ("open", None),
        ("drop-shift=0.2", "misses its limit"),
        ("dry-joint=0.08", "misses its limit"),
    ],
)
def test_faulty_diodes_never_pass(fault: str, words: str | None, tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w")
    bench = folder / "bench.toml"
    bench.write_text(bench.read_text("utf-8") + f'TG-0050 = ["{fault}"]\n', "utf-8")
    done, _ = measure(folder, "TG-0050", "stage-diode.toml")
    result = done.evaluation.result
    assert result.verdict != "pass"
    if words is not None:
        assert words in " ".join([*result.why, *result.findings])


def test_a_good_diode_passes(tmp_path: Path) -> None:
    done, _ = measure(workshop(tmp_path / "w"), "TG-0042", "stage-diode.toml")
    assert done.error is None
    assert done.evaluation.result.verdict == "pass"


def test_a_part_beyond_its_rating_keeps_a_board_from_passing(tmp_path: Path) -> None:
    """The gate of this stage sees the whole supply: at 15 V it needs more than 12 V of rating."""
    folder = workshop(tmp_path / "w")
    stage = folder / "stage.toml"
    stage.write_text(
        stage.read_text().replace("gate_source_max_V = 20.0", "gate_source_max_V = 12.0")
    )
    done, _ = measure(folder)
    assert done.error is None
    result = done.evaluation.result
    assert result.verdict == "undecided"
    assert any("Q1: its gate-source voltage can reach 14.9" in line for line in result.why)
    row = next(r for r in result.ratings if r["rating"] == "gate-source voltage")
    assert row["holds"] is False
    assert "DOES NOT HOLD" in (done.folder / "report.html").read_text("utf-8")
