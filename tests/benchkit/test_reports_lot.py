"""The report of a lot: who is named first, what is missing, and what a small lot cannot say."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import pytest

from benchkit.evaluation.evaluate import Evaluation
from benchkit.records.record import Record
from benchkit.reports.lot import lot_report
from benchkit.reports.quantities import line_of, quantities_of, remarks_on
from tests.benchkit.test_reports_material import REVERSED, Board, Reversal, like, run

Runs = list[tuple[Record, Evaluation, str]]


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> dict[str, tuple[Record, Evaluation]]:
    folder = tmp_path_factory.mktemp("lot")
    stopped = (("stopped", "the guard tripped: case is above its limit"),)
    return {
        "good": run(folder / "good", Board(), "TG-0001"),
        "bad": run(folder / "bad", Board(scale=1.7), "TG-0002"),
        "stopped": run(folder / "stopped", Board(currents=3, soak_s=0, events=stopped), "TG-0003"),
    }


def alike(made: dict[str, tuple[Record, Evaluation]], count: int) -> Runs:
    """Good boards whose figures are spread a little, without a trend."""
    record, evaluation = made["good"]
    factors = [1 + 0.01 * math.sin(2.4 * k) for k in range(count)]
    return [
        (record, like(evaluation, f"B-{k:03d}", factor), f"boards/B-{k:03d}/report.html")
        for k, factor in enumerate(factors)
    ]


def test_boards_that_differ_are_named_first_with_their_reasons(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    runs = [(*made[name], f"boards/{name}/report.html") for name in ("stopped", "good", "bad")]
    planned = ["TG-0001", "TG-0002", "TG-0003", "TG-0004"]
    html = lot_report("Tide gauges", runs, planned)
    front = html[html.index("<body>") : html.index('id="statistics"')]
    assert "No: not every board passes." in front
    assert "Planned but not measured: TG-0004." in front
    named = re.findall(r'<a href="boards/(\w+)/report.html">', front)
    assert named == ["bad", "stopped"]
    assert "misses its limit" in front
    assert "The run was stopped: the guard tripped" in front
    for name in ("stopped", "good", "bad"):
        assert f'<a href="boards/{name}/report.html">' in html[html.index('id="serials"') :]
    assert "planned, not measured" in html[html.index('id="serials"') :]
    assert re.search(r"<b>1</b> PASS.*<b>1</b> FAIL.*<b>1</b> UNDECIDED", front, re.DOTALL)


def test_an_outlier_is_named_though_it_passes(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    runs = alike(made, 20)
    record, evaluation = made["good"]
    runs[7] = (record, like(evaluation, "B-007", 1.2), "boards/B-007/report.html")
    html = lot_report("Tide gauges", runs, [e.result.serial for _, e, _ in runs])
    front = html[: html.index('id="statistics"')]
    assert "Yes, for what was tested here." in front
    assert re.findall(r'<a href="boards/([\w-]+)/', front) == ["B-007"]
    assert "Stands out from the lot" in front
    assert "None: every measured board passes" in lot_report("x", alike(made, 20), [])


def test_numbers_and_scales_are_those_of_the_boards_that_neither_fail_nor_stand_out(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    runs = alike(made, 16)
    good = [e.result.measurands for _, e, _ in runs]
    record, evaluation = made["good"]
    far = like(evaluation, "B-FAR", 100.0)
    runs[3] = (record, replace(far, result=replace(far.result, verdict="fail")), "far.html")
    runs[9] = (record, like(evaluation, "B-ODD", 1.2), "odd.html")
    boards = [e.result.measurands for _, e, _ in runs]
    three = next(q for q in quantities_of(boards, [3]) if q.condition.startswith("3 A"))
    assert sorted(three.odd) == sorted(three.left_out) == [3, 9]
    assert three.unit == "mV"
    assert three.high == pytest.approx(85.0)
    kept = quantities_of([rows for k, rows in enumerate(good) if k not in (3, 9)])
    alone = next(q for q in kept if q.condition.startswith("3 A"))
    assert three.statistics == alone.statistics
    line = line_of(three)
    assert line.n == "14 of 16"
    assert float(line.mean) == pytest.approx(alone.statistics.mean or 0.0, rel=1e-3)
    assert all(len(re.sub(r"^[0.]+|\.", "", text)) >= 3 for text in (line.mean, line.sd))
    html = lot_report("Tide gauges", runs, [e.result.serial for _, e, _ in runs])
    assert "B-FAR everywhere, because its verdict is fail; B-ODD from 13 of the 13" in html
    spread = html[html.index('id="spread"') :]
    ticks = [float(t) for t in re.findall(r">([\d.]+)</text>", spread)]
    assert max(ticks) < 1000
    assert re.search(r"B-FAR: \d{4,5}(\.\d+)? mV</text>", spread)
    assert "limit ≤ 85 mV" in spread


def test_many_failed_boards_neither_hide_each_other_nor_change_the_numbers(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    _, evaluation = made["good"]
    boards = [e.result.measurands for _, e, _ in alike(made, 12)]
    failed = [1, 4, 6, 7, 10]
    for k in failed:
        boards[k] = like(evaluation, f"B-{k}", 1.5).result.measurands
    drop = quantities_of(boards, failed)[0]
    assert sorted(drop.odd) == failed
    assert drop.statistics.n == 7
    assert drop.statistics.sd == pytest.approx(0.0071 * (drop.statistics.mean or 0.0), rel=0.5)


def test_only_what_is_judged_and_the_key_figures_of_heat_are_drawn(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    html = lot_report("Tide gauges", alike(made, 6), [])
    spread = html[html.index('id="spread"') :]
    titles = re.findall(r">([A-Z][^<,]*, [^<]*)\((?:mV|V|K|K/W|°C)\)", spread)
    assert [t.partition(",")[0] for t in titles] == [
        "Forward drop", "Forward drop", "Drop when warm", "Thermal resistance", "Hottest case",
        "Junction margin",
    ]  # fmt: skip
    assert "7 more figures" in spread


def test_what_one_board_was_not_tested_for_names_that_board(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    runs = alike(made, 3)
    record, evaluation, link = runs[1]
    result = evaluation.result
    skipped = "heat: too hot, so the soak was left out"
    result = replace(
        result, verdict="undecided", why=["no usable soak", skipped],
        not_tested=[*result.not_tested, skipped],
    )  # fmt: skip
    runs[1] = (record, replace(evaluation, result=result), link)
    html = lot_report("Tide gauges", runs, [])
    assert html.count("too hot, so the soak was left out") == 1
    assert "B-001: heat: too hot" in html


def test_a_lot_of_one_says_what_it_cannot_say(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    html = lot_report("One", [(*made["good"], "boards/TG-0001/report.html")], ["TG-0001"])
    assert "Yes, for what was tested here." in html
    assert "A spread needs two boards or more" in html or "a spread needs two boards" in html
    assert "Every board against limits and datasheet band" in html


def test_a_lot_that_was_not_begun_reports() -> None:
    html = lot_report("None yet", [], ["A-1", "A-2"])
    assert "Planned but not measured: A-1, A-2." in html
    assert "No board has been measured yet." in html
    assert "UNDECIDED" in html


def test_two_hundred_boards_are_all_listed_and_linked(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    runs = alike(made, 200)
    html = lot_report("Many", runs, [e.result.serial for _, e, _ in runs])
    assert len(set(re.findall(r'href="(boards/B-\d+/report.html)"', html))) == 200
    assert len(html) < 1_200_000


def test_of_two_runs_of_a_serial_the_last_counts(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    record, bad = made["bad"]
    again = replace(made["good"][1], result=replace(made["good"][1].result, serial="TG-0002"))
    runs = [(record, bad, "first/report.html"), (record, again, "second/report.html")]
    html = lot_report("Again", runs, ["TG-0002"])
    assert "Yes, for what was tested here." in html
    assert "1 of the runs superseded by a later one" in html
    assert html.count("measured again later") == 1


def test_the_same_runs_give_the_same_bytes_and_all_is_escaped(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    record, evaluation = made["good"]
    evil = "<script>alert(1)</script>"
    runs = [(record, like(evaluation, evil, 1.0), 'javascript:"<script>')]
    html = lot_report(evil, runs, [evil, evil + "2"])
    assert html == lot_report(evil, runs, [evil, evil + "2"])
    assert "<script" not in html
    assert 'href="javascript:' not in html
    assert "Tide gauge logger, &lt;input&gt; stage" in html
    assert set(re.findall(r"https?://[^\s\"'<)]+", html)) <= {
        "http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink",
    }  # fmt: skip


def test_boards_are_compared_at_the_same_condition_though_their_own_temperatures_differ(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    boards = [made[name][1].result.measurands for name in ("stopped", "good", "bad")]
    found = quantities_of(boards)
    assert [q.condition for q in found if q.name == "drop"] == [
        f"{a} A, 12 V supply" for a in ("0.1", "0.2", "0.5", "1", "2", "3", "4", "5")
    ]
    assert [q.name for q in found][8:] == [
        "case_hottest", "junction_margin", "warm_drop", "case_rise", "thermal_resistance",
    ]  # fmt: skip
    assert [q.statistics.n for q in found] == [3, 3, 3, 2, 2, 2, 2, 2, 2, 2, 2, 2, 2]
    margin = next(q for q in found if q.name == "junction_margin")
    assert (margin.low, margin.high) == (30.0, None)
    assert line_of(margin).limit == "≥ 30"


def test_a_steady_drift_and_too_few_boards_are_said_in_words(
    made: dict[str, tuple[Record, Evaluation]],
) -> None:
    _, evaluation = made["good"]
    drifting = [like(evaluation, f"B-{k}", 1 + 0.01 * k) for k in range(9)]
    told = remarks_on(quantities_of([e.result.measurands for e in drifting]))
    assert any("suspect a bench that drifts" in text for text in told)
    assert any("fewer than ten boards" in text for text in told)


def test_what_was_tried_in_reverse_is_a_quantity_of_the_lot(
    tmp_path_factory: pytest.TempPathFactory,
) -> None:
    folder = tmp_path_factory.mktemp("reversed")
    runs = []
    for number in range(3):
        board = Board(stage=REVERSED, reversal=Reversal(), seed=number + 1)
        runs.append((*run(folder / str(number), board, f"B-{number}"), f"b/{number}.html"))
    found = quantities_of([e.result.measurands for _, e, _ in runs])
    tried = [(q.name, q.condition, q.statistics.n) for q in found[-5:]]
    assert tried[:2] == [
        ("reverse_leakage", "15 V reversed, after 6 s", 3),
        ("reverse_guarded", "15 V reversed, after 6 s", 3),
    ]
    assert {(name, n) for name, _, n in tried[2:]} == {("drop_change", 3)}
    html = lot_report("Tide gauges", runs, [])
    assert "forward drop, heat and reversed supply, one lot" in html
    assert "Leakage in reverse, 15\u00a0V reversed, after 6\u00a0s" in html
