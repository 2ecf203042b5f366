"""The fused trial: planned, done on the simulated bench, and judged."""

from __future__ import annotations

import html
import math
from pathlib import Path

import pytest
from scipy.optimize import brentq

from benchkit.errors import InputError, Refused
from benchkit.evaluation.fused_trial import FusedDetail
from benchkit.files import BenchFile, load
from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.stage import Stage, build_stage
from procedures.clamp_trial_plan import plan_clamp
from procedures.commands import verify_board
from procedures.fused_trial_plan import FusedPlan, plan_fused
from procedures.plan import plan_board
from procedures.verify import Done
from tests.clamp_shop import (
    CLEARING_A2S,
    FUSE,
    FUSED,
    FUSED_LIMITS,
    LIMITS,
    MELTING_A2S,
    POINT_A,
    POINT_S,
    RATED_A,
    REVERSE,
    shop,
    stage_text,
    tried,
)
from tests.simulated_bench import workshop

pytestmark = pytest.mark.xdist_group("fused_trial")
GOOD = "TG-0050"
BOARDS = {
    GOOD: (), "LARGE": ("fuse-too-large=1.7",), "BRIDGED": ("fuse-bridged",),
    "BLOWN": ("fuse-blown",),
}  # fmt: skip
TABLES = FUSED + REVERSE + LIMITS + FUSED_LIMITS
Found = dict[str, tuple[Done, Record]]


@pytest.fixture(scope="module")
def found(tmp_path_factory: pytest.TempPathFactory) -> Found:
    return tried(shop(tmp_path_factory.mktemp("fused") / "w", TABLES, BOARDS), *BOARDS)


def row(done: Done, name: str) -> Measurand:
    return next(m for m in done.evaluation.result.measurands if m.name == name)


def closed_form_s(current_A: float) -> float:
    """From the printed figures alone: melting I2t is tau I0^2, and the one printed point lies on
    t = -tau ln(1 - (I0/I)^2); then the arcing I2t flows at the same current."""

    def off(opening_A: float) -> float:
        tau = MELTING_A2S / opening_A**2
        return -tau * math.log(1 - (opening_A / POINT_A) ** 2) - POINT_S

    opening_A = brentq(off, 1.5 * RATED_A, 2.1 * RATED_A)
    tau = MELTING_A2S / opening_A**2
    melts = -tau * math.log(1 - (opening_A / current_A) ** 2)
    return float(melts + (CLEARING_A2S - MELTING_A2S) / current_A**2)


def test_a_good_fuse_clears_when_its_law_says_and_the_clamp_is_as_it_was(found: Found) -> None:
    done, record = found[GOOD]
    result = done.evaluation.result
    assert done.error is None
    assert result.verdict == "pass", result.why
    clears = row(done, "fuse_clears")
    assert clears.measured is not None
    assert clears.U is not None
    assert clears.U < 0.003
    assert clears.predicted is not None
    assert clears.predicted["nominal"] == pytest.approx(closed_form_s(8.0), rel=2e-3)
    assert clears.measured == pytest.approx(closed_form_s(8.0), abs=clears.U)
    through = row(done, "fuse_let_through")
    assert through.measured == pytest.approx(64.0 * closed_form_s(8.0), abs=through.U)
    assert through.limit["high"] == pytest.approx(38**2 * 8.3e-3 / 2)  # half-sine: I^2 t / 2
    peak = row(done, "clamp_peak")
    assert peak.verdict == "pass"
    # The burst began before the current, and the fuse is proved in place before it.
    burst = record.at("fused/burst", "exposed_current")
    assert abs(burst[0].value) < 0.01
    assert min(r.value for r in burst) == pytest.approx(-8.0, abs=0.02)
    kinds = [e["kind"] for e in record.events]
    assert kinds.index("fuse") < kinds.index("new-fuse")
    assert record.steps("clamp/after/")
    for name in ("clamp_drop_change", "clamp_leakage_change"):
        for change in (m for m in result.measurands if m.name == name):
            assert change.measured is not None
            assert change.U is not None
            assert abs(change.measured) < 1.5 * change.U


def test_predicted_stands_beside_found(found: Found) -> None:
    done, _ = found[GOOD]
    rows = [s for s in done.evaluation.result.scenarios if s["scenario"] == "reversed-source"]
    assert [s["what"] for s in rows] == [
        "F1 opens at 8 A, in", "let through at 8 A", "guarded port below zero at 8 A, at its worst",
    ]  # fmt: skip
    assert all(s["agrees"] for s in rows)


def test_the_report_shows_the_burst(found: Found) -> None:
    done, _ = found[GOOD]
    page = html.unescape((done.folder / "report.html").read_text("utf-8"))
    for words in (
        "Full current the wrong way round", "F1 had cleared", "time from the onset of the current",
        "a fuse of its sheet clears", "What it did to the clamp",
    ):  # fmt: skip
        assert words in page


def test_a_fuse_too_large_that_outlives_the_clamp_fails(found: Found) -> None:
    done, record = found["LARGE"]
    result = done.evaluation.result
    assert result.verdict == "fail"
    assert any("suspect another fuse" in text for text in result.findings)
    assert row(done, "fuse_clears").verdict == "fail"
    assert row(done, "fuse_let_through").verdict == "fail"
    # The clamp is a short by then: nothing more than the first rung goes through it.
    assert any("D1 is shorted after the fuse had blown" in text for text in result.findings)
    assert record.steps("clamp/after/drop/") == ["clamp/after/drop/0.05"]


def test_a_bridge_in_the_fuse_s_place_does_not_open(found: Found) -> None:
    done, record = found["BRIDGED"]
    assert done.evaluation.result.verdict == "fail"
    assert any("F1 did not open" in text for text in done.evaluation.result.findings)
    assert record.said("fuse-stayed")
    assert not record.said("new-fuse")
    assert row(done, "fuse_clears").verdict == "undecided"


def test_without_a_fuse_in_place_nothing_is_driven(found: Found) -> None:
    done, record = found["BLOWN"]
    assert isinstance(done.error, Refused)
    assert "not found in place" in str(done.error)
    assert done.evaluation.result.verdict in ("fail", "undecided")
    assert not record.at("fused/burst", "exposed_current")
    assert not [e for e in record.events if str(e["text"]).startswith("fused trial:")]


# refused before anything is on


def planned(folder: Path, tables: str = TABLES, fuse: str = FUSE, **bench: str) -> FusedPlan | None:
    file = load(BenchFile, workshop(folder, supply=bench.get("supply", "supply-select"))
                / "bench.toml")  # fmt: skip
    stage = _stage(tables, fuse)
    forward = plan_board(_stage("", fuse), file).forward
    return plan_fused(stage, file, forward, plan_clamp(stage, file, forward, folder), folder)


def _stage(tables: str, fuse: str) -> Stage:
    return build_stage(parse(StageFile, stage_text(tables, fuse=fuse), "stage.toml"), "stage.toml")


def test_the_plan_says_what_it_costs(tmp_path: Path) -> None:
    plan = planned(tmp_path / "w")
    assert plan is not None
    blow = plan.blow
    assert blow.current_limit_A == 8.0
    assert blow.over_current_A == pytest.approx(8.8)
    assert blow.may_limit
    assert blow.burst is not None
    assert blow.burst.seconds == pytest.approx(1.5 * closed_form_s(8.0) + 0.25, rel=2e-3)
    said = "\n".join(step.text for step in plan.steps())
    for words in ("One fuse is lost", "output capacitor", "NEW fuse of 1.6 A"):
        assert words in said
    assert "EYE PROTECTION" in plan.caution


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("melting_A2s = 3.0", "melting_A2s = 3.9", "lets through up to"),
        ("breaking_A = 1500", "breaking_A = 5", "can break 5 A, and up to 8.8 A can flow"),
        ("rated_voltage_V = 32", "rated_voltage_V = 10", "is rated 10 V, and 15 V stand across it"),
    ],
)
def test_a_fuse_that_is_not_coordinated_is_refused_with_what_would_do(
    old: str, new: str, words: str, tmp_path: Path
) -> None:
    fuse = FUSE.replace(old, new)
    if "melting" in new:
        fuse = fuse.replace("clearing_A2s = 5.0", "clearing_A2s = 9.0")
    assert fuse != FUSE
    with pytest.raises(InputError, match=words) as raised:
        planned(tmp_path / "w", fuse=fuse)
    assert "would do" in str(raised.value)
    assert raised.value.exit_code == 2


def test_a_current_at_which_it_never_opens_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="F1 does not open at that"):
        planned(tmp_path / "w", TABLES.replace("current_A = 8.0", "current_A = 2.0"))


def test_a_supply_that_trips_at_its_limit_is_refused(tmp_path: Path) -> None:
    tables = TABLES.replace("current_limit_A = 0.5", "current_limit_A = 0.01")
    tables = tables.replace("leakage_max_A = 1e-3", "leakage_max_A = 1e-4")
    with pytest.raises(InputError, match="over-current level of its own") as raised:
        planned(tmp_path / "w", tables, supply="supply-list")
    assert raised.value.exit_code == 2


def test_a_meter_without_bursts_is_refused(tmp_path: Path) -> None:
    folder = workshop(tmp_path / "w", supply="supply-select")
    dialect = folder / "meter-scan-quick.toml"
    text = dialect.read_text("utf-8")
    dialect.write_text(text[: text.index("[burst]")], "utf-8")
    file, stage = load(BenchFile, folder / "bench.toml"), _stage(TABLES, FUSE)
    forward = plan_board(_stage("", FUSE), file).forward
    with pytest.raises(InputError, match=r"has no \[burst\]"):
        plan_fused(stage, file, forward, plan_clamp(stage, file, forward, folder), folder)


def test_a_refused_one_energises_nothing(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", TABLES, {}, fuse=FUSE.replace("breaking_A = 1500",
                                                                "breaking_A = 5"))  # fmt: skip
    with pytest.raises(InputError, match="can break 5 A"):
        verify_board(folder / "mine.toml", folder / "bench.toml", GOOD, folder / "o",
                     dry_run=False, as_json=True)  # fmt: skip
    assert not (folder / "o").exists()


@pytest.mark.parametrize(
    ("tables", "topology", "words"),
    [
        (TABLES, "clamp", "only a fused-clamp has a fuse"),
        (FUSED, "fused-clamp", r"fused_trial needs a \[reverse\] table"),
    ],
)
def test_stage_files_that_ask_for_it_in_vain(tables: str, topology: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        parse(StageFile, stage_text(tables, topology), "stage.toml")


def test_the_detail_is_what_the_section_draws(found: Found) -> None:
    done, _ = found[GOOD]
    detail = next(p.detail for p in done.evaluation.parts if isinstance(p.detail, FusedDetail))
    assert detail.burst is not None
    assert detail.burst.pulse is not None
    assert detail.burst.pulse.current.value == pytest.approx(8.0, abs=0.02)
    assert not detail.short
