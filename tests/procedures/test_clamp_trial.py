"""The trial of a clamp: planned, done on the simulated bench, and judged."""

from __future__ import annotations

import html
from pathlib import Path

import pytest

from benchkit.errors import InputError
from benchkit.evaluation.clamp_trial_band import drop_band
from benchkit.files import BenchFile, load
from benchkit.harness import CHARGING, Harness
from benchkit.records.record import Record
from procedures.clamp_trial_plan import ClampPlan, plan_clamp
from procedures.plan import plan_board
from procedures.verify import Done
from tests.benchkit.nine_stages import PARTS, made
from tests.clamp_shop import LIMITS, REVERSE, shop, tried
from tests.simulated_bench import workshop

pytestmark = pytest.mark.xdist_group("clamp_trial")
GOOD = "TG-0050"
BOARDS = {
    GOOD: (), "OPEN": ("open",), "LEAKY": ("leaky=1000",), "BADLY": ("leaky=100",),
    "WRONG": ("wrong-part",), "TURNED": ("wrong-way-round",), "SHORT": ("short",),
    "BLOWN": ("fuse-blown",),
}  # fmt: skip
Found = dict[str, tuple[Done, Record]]


@pytest.fixture(scope="module")
def found(tmp_path_factory: pytest.TempPathFactory) -> Found:
    folder = shop(tmp_path_factory.mktemp("clamp") / "w", REVERSE + LIMITS, BOARDS)
    return tried(folder, *BOARDS)


def test_a_good_clamp_is_read_either_way_round_and_passes(found: Found) -> None:
    done, record = found[GOOD]
    result = done.evaluation.result
    assert done.error is None
    assert result.verdict == "pass"
    assert [e["text"] for e in record.events if e["kind"] == "harness"] == [
        Harness(("supply",), ()).sentence(),
        Harness(("supply",), (), crossed=True).sentence(),
        CHARGING.sentence(),
    ]
    for reading in record.at("clamp/before/leakage", "exposed_voltage"):
        assert reading.value == pytest.approx(15.0, abs=0.02)
    rows = {row.condition.partition(",")[0]: row for row in result.measurands}
    leakage = rows["15 V the right way round"]
    assert leakage.name == "clamp_leakage"
    assert leakage.limit["high"] == 1e-3
    assert leakage.measured is not None
    assert abs(leakage.measured) < 1e-4
    for amps in (0.05, 0.15, 0.5):
        row = rows[f"{amps:g} A reversed"]
        assert (row.measured, row.predicted) != (None, None)
        assert row.en is not None
        assert row.en < 1.5
        for reading in record.at(f"clamp/before/drop/{amps!r}", "exposed_current"):
            assert reading.value == pytest.approx(-amps, abs=0.004)
    assert rows["0.5 A reversed"].limit["high"] == 1.0
    assert rows["0.05 A reversed"].verdict is None
    assert not record.steps("reverse/")
    assert any("with more than 0.5 A behind it" in text for text in result.not_tested)


def test_drops_follow_a_junction(found: Found) -> None:
    """Ten times the current drops at least 2.3 kT/q more, and series resistance adds to it: kT/q
    is 25.7 mV at 25 C (CODATA)."""
    done, _ = found[GOOD]
    drops = [m.measured for m in done.evaluation.result.measurands if m.name == "clamp_drop"]
    low, _, high = (value for value in drops if value is not None)
    assert 0.0592 < high - low < 0.0592 * 2 + 0.5 * 0.06


@pytest.mark.parametrize(
    ("serial", "said"),
    [
        ("OPEN", "D1 is open or missing"),
        ("BLOWN", "F1 is open, blown or missing"),
        ("LEAKY", "D1 leaks: at 15 V the right way round 15 mA"),
        ("BADLY", "D1 leaks more than the supply's current limit allowed"),
        ("WRONG", "suspect another part"),
        ("TURNED", "it is fitted the wrong way round, or the leads are crossed"),
        ("SHORT", "suspect D1 to be a short"),
    ],
)
def test_what_is_wrong_with_a_clamp_is_called_by_its_name(
    serial: str, said: str, found: Found
) -> None:
    done, record = found[serial]
    result = done.evaluation.result
    assert result.verdict == "fail"
    weights = {r.weight for part in done.evaluation.parts for r in part.remarks if said in r.text}
    assert weights == {"doubt" if serial == "WRONG" else "fault"}
    assert not {"left-reversed", "not-confirmed-off"} & {e["kind"] for e in record.events}
    drops = [m for m in result.measurands if m.name == "clamp_drop" and m.limit["high"] is not None]
    assert [m.verdict for m in drops] == ["fail" if serial == "WRONG" else "undecided"] * (
        serial != "LEAKY"
    ) + ["pass"] * (serial == "LEAKY")


def test_an_open_clamp_is_asked_no_more_than_the_first_rung(found: Found) -> None:
    _, record = found["OPEN"]
    assert record.steps("clamp/before/drop/") == ["clamp/before/drop/0.05"]
    assert record.said("clamp-cut")


def test_the_report_tells_it(found: Found) -> None:
    done, _ = found[GOOD]
    page = html.unescape((done.folder / "report.html").read_text("utf-8"))
    for words in ("The clamp, either way round", "drop at 0.5", "Drop of the clamp, reversed"):
        assert words in page


def test_a_supply_that_trips_at_its_limit_approaches_by_its_voltage(tmp_path: Path) -> None:
    """And the plain clamp, without a fuse."""
    tables = (REVERSE + LIMITS).replace("0.5", "0.01")
    folder = shop(tmp_path / "w", tables, {}, supply="supply-list", topology="clamp")
    done, record = tried(folder, GOOD)[GOOD]
    assert done.error is None
    assert done.evaluation.result.verdict == "pass"
    assert not [e for e in record.events if e["kind"] in ("trip", "stopped")]
    amps = [r.value for r in record.at("clamp/before/approach", "exposed_current")]
    assert min(amps) > -0.0125
    for reading in record.at("clamp/before/drop/0.01", "exposed_current"):
        assert -0.0125 < reading.value < -0.0075
    [row] = [m for m in done.evaluation.result.measurands if m.name == "clamp_drop"]
    assert row.condition.startswith("0.01 A reversed")
    assert row.en is not None
    assert row.en < 1.5


# planning


def planned(
    folder: Path, tables: str, topology: str = "clamp", supply: str = "supply-select"
) -> ClampPlan | None:
    bench = load(BenchFile, workshop(folder, supply=supply) / "bench.toml")
    forward = plan_board(made(topology), bench).forward
    return plan_clamp(made(topology, tables=tables), bench, forward, folder)


def test_the_plan_says_what_will_be_done(tmp_path: Path) -> None:
    plan = planned(tmp_path / "w", REVERSE)
    assert plan is not None
    assert not plan.gentle
    assert plan.currents_A == (0.05, 0.15, 0.5)
    assert plan.leakage.current_limit_A == 0.1
    worst = drop_band(made("clamp"), 0.5, 25.0).most_V
    assert plan.drops[-1].guarded_min_V == pytest.approx(-1.5 * worst)
    for rung in plan.drops:
        assert rung.may_limit
        assert rung.voltage_V == 3.0
        assert rung.over_current_A > rung.current_limit_A
    assert "the supply as a current source" in "\n".join(step.text for step in plan.steps())
    assert planned(tmp_path / "v", REVERSE, topology="series-diode") is None
    assert planned(tmp_path / "u", "") is None


@pytest.mark.parametrize(
    ("tables", "supply", "words"),
    [
        (REVERSE + "dwell_s = 2.0\n", "supply-select", "reverse.dwell_s is given"),
        (REVERSE, "supply-list", "reverse.current_limit_A is 0.5, but the supply of this bench"),
        (
            REVERSE + "[limits]\nleakage_max_A = 0.2\n",
            "supply-select",
            "limits.leakage_max_A is 0.2: it must be below 0.1 A",
        ),
    ],
)
def test_what_cannot_be_done_is_refused(
    tables: str, supply: str, words: str, tmp_path: Path
) -> None:
    with pytest.raises(InputError, match=words):
        planned(tmp_path / "w", tables, supply=supply)


def test_no_part_is_driven_beyond_its_rating(tmp_path: Path) -> None:
    bench = load(BenchFile, workshop(tmp_path / "w", supply="supply-select") / "bench.toml")
    forward = plan_board(made("clamp"), bench).forward
    for old, new, words in (
        ("average_current_max_A = 6", "average_current_max_A = 0.3", "average_current_max_A 0.3"),
        ("reverse_voltage_max_V = 100", "reverse_voltage_max_V = 12", "reverse_voltage_max_V 12"),
    ):
        weak = PARTS["rectifier"].replace(old, new)
        with pytest.raises(InputError, match=words):
            plan_clamp(made("clamp", tables=REVERSE, D1=weak), bench, forward)
