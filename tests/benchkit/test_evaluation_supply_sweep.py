"""The supply sweep, judged from its record: where a stage is on, and what may be said of it."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from pathlib import Path

import numpy as np
import pytest

from benchkit.evaluation.part import Part
from benchkit.evaluation.promised import promised
from benchkit.evaluation.supply_sweep import Step, crossing, read_supply_sweep
from benchkit.evaluation.supply_sweep_band import on_level, onsets, supply_band
from benchkit.evaluation.supply_sweep_judged import SupplyDetail, judge_supply_sweep
from benchkit.files import BenchFile, StageFile, load
from benchkit.files.loading import parse
from benchkit.parts.mosfet import SLOPE_FACTOR, MosfetLaws
from benchkit.reading import Reading
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.reports.supply_sweep_figure import supply_sweep_figure
from tests.benchkit.nine_stages import made, text

STARTERS = Path(__file__).parents[2] / "benchkit" / "files" / "starters"
VOLTS = (2.0, 2.5, 3.0, 4.0, 6.0, 12.0, 15.0)
AMPS = 2.0
SWEEP = f"[supply_sweep]\nvoltages_V = {list(VOLTS)}\n"
LIMITS = "[limits]\ndrop = [{ current_A = 2.0, max_V = 0.07 }]\n"
LEAD_OHM = 0.0004
Law = Callable[[float], float]


def channel(volts: float) -> float:
    """A made-up board: 36 mV and what falls with the voltage above 1.9 V."""
    return 0.036 + 0.06 / max(volts - 1.9, 0.05)


def record(
    law: Law = channel,
    volts: tuple[float, ...] = VOLTS[::-1],
    tables: str = SWEEP + LIMITS,
    *,
    amps: Mapping[float, float] | None = None,
    gain: Mapping[str, float] | None = None,
    gate: Law | None = lambda volts: -(volts - channel(volts)),
    events: tuple[dict[str, object], ...] = (),
    topology: str = "pmos-pass",
) -> Record:
    """Two readings of everything at each voltage; gain: by point, a relative error of its meter."""
    readings: list[tuple[str, Reading]] = []
    wrong = gain or {}
    for number, at in enumerate(volts):
        carried = (amps or {}).get(at, AMPS)
        values = {
            "drop": law(at) + LEAD_OHM * carried, "exposed_current": carried, "exposed_voltage": at,
            **({"gate_voltage": gate(at)} if gate is not None else {}), "case": 25.0,
        }  # fmt: skip
        ranges = {"drop": 1.0, "exposed_current": 0.1, "exposed_voltage": 100.0,
                  "gate_voltage": 100.0, "case": 0.0}  # fmt: skip
        for turn in range(2):
            for point, value in values.items():
                off = value * (1 + wrong.get(point, 0.0)) + turn * 1e-6
                full = 10.0 if point == "drop" and abs(value) > 1 else ranges[point]
                reading = Reading(10.0 + number + 0.1 * turn, point, off, "V", 0.0, full)
                readings.append((f"supply/{at!r}", reading))
    return Record(
        Path("made up"), load(BenchFile, STARTERS / "bench.toml"),
        parse(StageFile, text(topology, "", tables), "stage.toml"), tuple(readings), events,
    )  # fmt: skip


def judged(run: Record) -> Part:
    part = judge_supply_sweep(run, promised(run))
    assert part is not None
    return part


def row(part: Part, name: str) -> Measurand:
    [found] = [m for m in part.rows if m.name == name]
    return found


def told(part: Part, weight: str) -> str:
    return "; ".join(remark.text for remark in part.remarks if remark.weight == weight)


def steps_of(run: Record) -> tuple[Step, ...]:
    sweep = read_supply_sweep(run)
    assert sweep is not None
    return sweep.steps


# where it is on


@pytest.mark.parametrize("topology", ["pmos-pass", "nmos-pass"])
def test_the_typical_board_is_on_where_the_textbook_says(topology: str) -> None:
    """In strong inversion I = b ((Vgs - VT) v + n v^2 / 2) for a channel whose drain lies v below
    its source, as a pass switch works (Enz, Krummenacher and Vittoz 1995, its strong-inversion
    limit, the source tied to the body); the rest of the drop is its series resistance."""
    stage = made(topology, "", SWEEP)
    laws = stage.typical().laws[stage.main]
    assert isinstance(laws, MosfetLaws)
    law, level = laws.channel, on_level(stage)
    assert level is not None
    across = level - AMPS * np.asarray(law.series_ohm).item()
    b, threshold = (np.asarray(of).item() for of in (law.gain_A_per_V2, law.threshold_V))
    gate = threshold + AMPS / (b * across) - SLOPE_FACTOR * across / 2
    onset = supply_band(stage, 25.0).on_from
    assert onset is not None
    assert onset.promise is not None
    assert onset.promise.nominal == pytest.approx(gate + level, rel=0.01)
    # The threshold's window is 1.0 to 2.5 V: parts at its ends are on so much sooner or later.
    assert onset.least_V < onset.promise.low < onset.promise.nominal < onset.promise.high
    assert onset.most_V - onset.promise.nominal == pytest.approx(2.5 - 1.7, abs=0.35)


def test_the_level_lies_half_way_between_channel_and_body_diode() -> None:
    """The sheet: some 18 milliohms at 15 V, and 0.85 V of body diode at 5 A, 60 mV a decade and
    what its series resistance takes less at 2 A."""
    level = on_level(made("pmos-pass", "", SWEEP))
    assert level is not None
    assert level == pytest.approx(math.sqrt(0.035 * 0.77), rel=0.05)
    assert on_level(made("series-diode", "", SWEEP)) is None


def test_onsets_are_interpolated_along_the_logarithm() -> None:
    volts = np.array([1.0, 2.0, 3.0, 4.0])
    drops = np.array([
        [0.8, 0.4, 0.1, 0.05],  # 0.2 lies half way from 0.1 to 0.4 in the logarithm
        [0.1, 0.1, 0.1, 0.05],
        [0.8, 0.8, 0.8, 0.8],
        [np.inf, np.inf, 0.1, 0.05],
        [0.1, 0.8, 0.1, 0.05],
    ])  # fmt: skip
    found = onsets(volts, drops, 0.2)
    assert found == pytest.approx([2.5, 1.0, math.inf, 2.5, 2 + math.log(4) / math.log(8)])


def test_a_crossing_is_found_from_above_and_a_dip_below_it_is_none() -> None:
    steps = steps_of(record(lambda v: 0.05 if v in (2.0, 12.0, 15.0, 6.0) else 0.2))
    found = crossing(steps, 0.1)
    assert found is not None
    assert found.above is not None
    assert (found.above.target_V, found.below.target_V) == (4.0, 6.0)
    assert found.value_V == pytest.approx(5.0, abs=1e-4)
    assert crossing(steps, 0.01) is None
    low = crossing(steps, 0.3)
    assert low is not None
    assert low.above is None
    assert low.value_V == pytest.approx(2.0, abs=1e-4)


# what is said of it


def test_a_good_board_and_its_uncertainty() -> None:
    part = judged(record())
    detail = part.detail
    assert isinstance(detail, SupplyDetail)
    level = detail.band.on_level_V
    assert level is not None
    truth = 1.9 + 0.06 / (level - 0.036)  # of the made-up law
    on = row(part, "on_from")
    assert on.measured is not None
    assert on.U is not None
    assert abs(on.measured - truth) < on.U
    # Anywhere between 2.0 and 2.5 V: from half of that, where it lies in the middle, to all of it.
    assert 0.95 * 0.25 < on.U < 0.5
    useful = row(part, "useful_from")
    assert useful.measured is not None
    assert useful.U is not None
    assert abs(useful.measured - (1.9 + 0.06 / (0.07 - 0.036))) < useful.U
    gate = row(part, "gate_voltage")
    assert gate.measured == pytest.approx(-(15.0 - channel(15.0)), abs=1e-4)
    margin = row(part, "gate_margin")
    assert margin.measured == pytest.approx(20.0 - 15.0 + channel(15.0), abs=1e-4)
    assert pytest.approx(gate.U) == margin.U
    assert margin.verdict is None
    assert not told(part, "fault")
    assert not told(part, "doubt")


@pytest.mark.parametrize(
    ("point", "percent", "name"),
    [
        ("drop", 0.004, "meter gain on its 1 V range"),
        ("exposed_voltage", 0.0045, "meter gain on its 100 V range"),
    ],
)
def test_a_gain_error_shifts_the_result_by_its_component(
    point: str, percent: float, name: str
) -> None:
    """The component is the declared limit over root three: a meter at its limit shows it all."""
    grown = 100.0  # so that the shift is not lost in noise
    on = row(judged(record()), "on_from")
    moved = row(judged(record(gain={point: grown * percent / 100})), "on_from").measured
    assert on.measured is not None
    assert moved is not None
    [u] = [line.u for line in on.budget if line.name == name]
    assert (moved - on.measured) / grown == pytest.approx(u * math.sqrt(3), rel=0.1)


def test_a_board_never_on_is_a_fault_whatever_its_limits() -> None:
    tables = SWEEP + LIMITS + "on_from_max_V = 9.0\n"
    part = judged(record(lambda _: 0.77, tables=tables, gate=lambda _: -1e-4))
    assert "it is not driven" in told(part, "fault")
    assert row(part, "on_from").verdict == "undecided"
    driven = judged(record(lambda _: 0.77, tables=tables, gate=lambda v: -v))
    assert "suspect another part, or a dry joint" in told(driven, "fault")


def test_a_load_without_its_current_says_only_that_it_is_not_on() -> None:
    ended: dict[str, object] = {"kind": "supply-sweep-ends", "text": "it ended at 2.5 V: ..."}
    part = judged(record(volts=VOLTS[:0:-1], amps={2.5: 0.4}, events=(ended,)))
    on = row(part, "on_from")
    # The board's own curve is below the level at 2.5 V, but not with a fifth of the current.
    assert on.measured == pytest.approx(2.75)
    assert pytest.approx(0.2375, rel=0.01) == on.U
    assert told(part, "note") == "supply sweep: it ended at 2.5 V: ..."
    assert not told(part, "doubt")


@pytest.mark.parametrize("volts", [VOLTS[:2:-1], VOLTS[:-1], ()])
def test_a_sweep_that_is_not_whole_passes_nothing(volts: tuple[float, ...]) -> None:
    keys = "on_from_max_V = 9.0\nuseful_from_max_V = 9.0\ngate_margin_min_V = 3.0\n"
    part = judged(record(volts=volts, tables=SWEEP + LIMITS + keys))
    assert "the supply sweep is not whole" in told(part, "doubt")
    assert row(part, "on_from").verdict == row(part, "useful_from").verdict == "undecided"
    assert row(part, "on_from").measured is None
    whole = judged(record(tables=SWEEP + LIMITS + keys))
    assert {m.verdict for m in whole.rows if m.name != "gate_voltage"} == {"pass"}


def test_an_upper_bound_meets_a_limit_above_it_and_misses_none() -> None:
    ended: dict[str, object] = {"kind": "supply-sweep-ends", "text": "2 V left out"}
    for most, verdict in ((3.5, "pass"), (3.0, "undecided"), (2.2, "undecided")):
        tables = SWEEP + LIMITS + f"on_from_max_V = {most}\n"
        part = judged(record(volts=VOLTS[:1:-1], tables=tables, events=(ended,)))
        on = row(part, "on_from")
        assert on.measured == pytest.approx(3.0, abs=1e-4)
        assert (on.verdict, on.predicted) == (verdict, None)
        assert on.remark.startswith("no more than this")


def test_without_a_limit_it_must_be_on_over_the_supply_range() -> None:
    def late(volts: float) -> float:
        return 0.05 if volts > 11 else 0.75

    part = judged(record(late))
    assert "not on over its whole supply range, which begins at 9 V" in told(part, "doubt") or (
        "begins at 9 V: supply_sweep.voltages_V needs a voltage" in told(part, "doubt")
    )
    limited = judged(record(late, tables=SWEEP + LIMITS + "on_from_max_V = 14.0\n"))
    assert "supply range" not in told(limited, "doubt")
    assert "higher than the most that the datasheets' tolerances" in told(limited, "doubt")


def test_a_part_on_too_soon_is_another_one() -> None:
    part = judged(record(lambda _: 0.004))
    assert "lower than the least" not in told(part, "doubt")  # 2 V is within the window
    low = SWEEP.replace("[2.0,", "[1.2, 1.4, 2.0,") + LIMITS
    early = judged(record(lambda _: 0.004, (*VOLTS[::-1], 1.4, 1.2), low))
    assert "lower than the least" in told(early, "doubt")


def test_a_diode_shows_its_drop_at_both_ends() -> None:
    drop = "[limits]\ndrop = [{ current_A = 2.0, max_V = 0.6 }]\n"
    run = record(lambda _: 0.41, tables=SWEEP + drop, gate=None, topology="series-diode")
    part = judged(run)
    assert [m.name for m in part.rows] == ["supply_drop", "supply_drop"]
    assert [m.measured for m in part.rows] == pytest.approx([0.41, 0.41], abs=1e-5)
    detail = part.detail
    assert isinstance(detail, SupplyDetail)
    assert "<svg" in supply_sweep_figure(detail, run.stage)


def test_no_table_is_no_part() -> None:
    run = record(tables=LIMITS)
    assert judge_supply_sweep(run, promised(run)) is None
