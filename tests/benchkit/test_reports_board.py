"""The report of one run: what it says, that it escapes, and that it is the same every time."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from benchkit.evaluation.evaluate import Evaluation
from benchkit.evaluation.verdict import rounded
from benchkit.records.record import Record
from benchkit.records.result import Measurand
from benchkit.reports.board import board_report
from benchkit.reports.budgets import budget_tables, drop_tables
from benchkit.reports.front import front_page
from benchkit.reports.law import FittedLaw, fitted_law
from benchkit.reports.words import (
    degrees,
    figures_of,
    place_in_band,
    plain,
    rescaled,
    shown_in,
    strip_of,
)
from tests.benchkit.test_reports_material import (
    BENCH,
    CHANNEL,
    JUNCTION,
    MANIFEST,
    REVERSED,
    Board,
    Reversal,
    run,
)

SECTIONS = ("front", "curves", "budgets", "run", "events", "cautions")
Made = tuple[Record, Evaluation]


@pytest.fixture(scope="module")
def good(tmp_path_factory: pytest.TempPathFactory) -> Made:
    return run(tmp_path_factory.mktemp("good") / "run", Board())


def test_the_verdict_comes_first_and_every_section_follows(good: Made) -> None:
    html = board_report(*good, MANIFEST)
    places = [html.index(f'id="{name}"') for name in SECTIONS]
    assert places == sorted(places)
    body = html[html.index("<body>") :]
    wanted = (
        "Can this board be signed off?", "Yes, for what was tested here.", "the tightest is",
        "What was measured", "What was not tested", "Measured by (operator)", "Signature",
        "Forward drop against current", "Case rise over ambient at 4 A", "Fitted law",
        "Where the uncertainty comes from", "How it was measured", "Events of note",
        "Local codes and licensed practice", "does not replace an electrical safety test",
    )  # fmt: skip
    found = [body.find(text) for text in wanted]
    assert -1 not in found
    assert found == sorted(found)


def test_the_same_record_gives_the_same_bytes(good: Made) -> None:
    assert board_report(*good, MANIFEST) == board_report(*good, dict(MANIFEST))


def test_nothing_is_fetched_from_elsewhere(good: Made) -> None:
    html = board_report(*good, MANIFEST)
    outside = set(re.findall(r"https?://[^\s\"'<)]+", html))
    assert outside <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}
    for way in ("<script", "<link", "<img", "@import", "url(http", "src="):
        assert way not in html


def test_all_that_a_user_typed_is_escaped(tmp_path: Path) -> None:
    evil = "<script>alert('x')</script><svg onload=\"y\">"
    toml = evil.replace('"', '\\"')
    board = Board(
        stage=CHANNEL.replace("Tide gauge logger, <input> stage", toml),
        bench=BENCH.replace("Bench <2> & shelf", toml),
        events=(("trip", evil), ("found-on", evil), ("stopped", evil), ("soak-skipped", evil)),
    )
    record, evaluation = run(tmp_path / "run", board, serial=evil)
    everywhere = {
        "operator": evil, "clock": evil, "bench": evil, "started": evil, "ended": evil,
        "status": evil, "schema": evil, "versions": {evil: evil},
        "instruments": {
            role: dict.fromkeys(("identity", "dialect", "calibration_due", "resource"), evil)
            for role in record.bench.instruments
        },
    }  # fmt: skip
    html = board_report(record, evaluation, everywhere)
    assert "<script" not in html
    assert "<svg onload" not in html
    assert html.count("&lt;script&gt;") > 20


def test_figures_are_printed_to_what_their_uncertainty_allows(good: Made) -> None:
    html = board_report(*good, MANIFEST)
    judged = [m for m in good[1].result.measurands if m.verdict is not None]
    assert len(judged) == 4
    for row in judged:
        factor, _ = shown_in(row.unit, [row])
        assert row.measured is not None
        assert row.U is not None
        value, spread = rounded(factor * row.measured, factor * row.U)
        assert f"<strong>{value}</strong> ± {spread}</td>" in html


def test_a_failed_board_says_why_in_words_beside_its_mark(tmp_path: Path) -> None:
    html = board_report(*run(tmp_path / "run", Board(scale=1.7)), MANIFEST)
    assert "misses its limit" in html
    assert "result noted, not released" in html
    assert re.search(r'<span class="mark fail"><svg.*?</svg>\s*FAIL</span>', html, re.DOTALL)
    assert "&gt; 1</strong>" in html


def test_a_stopped_run_with_hardly_any_data_still_reports(tmp_path: Path) -> None:
    board = Board(
        currents=2, soak_s=0,
        events=(
            ("trip", "case at 96.2 C is above 95 C"),
            ("stopped", "the guard tripped: case at 96.2 C is above 95 C"),
            ("not-confirmed-off", "supply: no answer within 2 s"),
        ),
    )  # fmt: skip
    record, evaluation = run(tmp_path / "run", board)
    html = board_report(record, evaluation, {})
    assert "UNDECIDED" in html
    assert "The run was stopped: the guard tripped" in html
    assert "The outputs were not confirmed off when this run ended." in html
    assert "not measured: this current was not reached" in html
    assert "There is no heating curve" in html
    assert "case at 96.2\u00a0°C" in html or "Case at 96.2\u00a0°C" in html
    assert html.count("not recorded") >= 5


def test_a_run_without_any_sweep_reports(tmp_path: Path) -> None:
    record, evaluation = run(tmp_path / "run", Board(currents=0, soak_s=0))
    assert evaluation.sweep is None
    html = board_report(record, evaluation, MANIFEST)
    assert "There is no drop curve" in html
    assert "There is no heating curve" in html
    assert "there is no measured figure" in html.lower()


def test_a_soak_that_is_too_short_draws_no_asymptote(good: Made, tmp_path: Path) -> None:
    assert "final rise " in board_report(*good, MANIFEST)
    record, evaluation = run(tmp_path / "run", Board(soak_s=20))
    assert evaluation.soak is not None
    assert not evaluation.soak.heating.usable
    html = board_report(record, evaluation, MANIFEST)
    assert "The soak does not say where the rise ends" in html
    assert "final rise " not in html
    assert "Case rise over ambient at 4 A" in html


def test_overdue_calibration_and_a_simulated_bench_stand_on_the_front(good: Made) -> None:
    html = board_report(*good, MANIFEST)
    front = html[: html.index('id="curves"')]
    assert "Calibration was overdue on the day of the run: meter (due 2026-01-31)" in front
    assert "simulated bench" in front
    real = board_report(*good, {**MANIFEST, "clock": "wall"})
    assert "simulated bench" not in real
    assert "2026-03-02 09:15 UTC" in front


def test_a_channel_s_fitted_law_follows_the_readings(good: Made) -> None:
    record, evaluation = good
    assert evaluation.sweep is not None
    law = fitted_law(record, evaluation.stage, evaluation.sweep)
    assert isinstance(law, FittedLaw)
    at = np.interp(evaluation.sweep.current_A, law.current_A, law.curve_V)
    assert np.max(np.abs(at - evaluation.sweep.drop_V)) < 1e-4
    assert "mΩ at 25 °C" in law.sentences[0]


def test_a_junction_s_fitted_law_finds_the_datasheet_s_ideality(tmp_path: Path) -> None:
    record, evaluation = run(tmp_path / "run", Board(stage=JUNCTION))
    assert evaluation.sweep is not None
    law = fitted_law(record, evaluation.stage, evaluation.sweep)
    assert isinstance(law, FittedLaw)
    model = evaluation.stage.models["D1"]
    found = re.search(r"ideality ([\d.]+) ± ([\d.]+)", law.sentences[0])
    assert found is not None
    truth = float(getattr(model, "typical").ideality)  # noqa: B009 - a diode's model
    assert abs(float(found[1]) - truth) <= 2 * float(found[2])
    assert "current (A), logarithmic" in board_report(record, evaluation, MANIFEST)


def test_two_currents_are_too_few_for_a_junction_s_law(tmp_path: Path) -> None:
    record, evaluation = run(tmp_path / "run", Board(stage=JUNCTION, currents=2, soak_s=0))
    html = board_report(record, evaluation, MANIFEST)
    assert "No law could be fitted to the sweep" in html
    assert "no law was fitted, so there are no residuals" in html


def test_a_skipped_soak_is_told_under_what_was_not_tested_and_nowhere_else_in_front(
    tmp_path: Path,
) -> None:
    skipped = "heat: the loss could take the case too high, so the soak was left out"
    board = Board(scale=1.7, soak_s=0, events=(("soak-skipped", skipped),))
    record, evaluation = run(tmp_path / "run", board)
    assert skipped in evaluation.result.why
    html = board_report(record, evaluation, MANIFEST)
    before = html[: html.index('id="events"')]
    assert before.count("so the soak was left out") == 1
    assert before.index("What was not tested") < before.index("so the soak was left out")


def test_a_trial_in_reverse_has_its_section(tmp_path: Path) -> None:
    record, evaluation = run(tmp_path / "run", Board(stage=REVERSED, reversal=Reversal()))
    html = board_report(record, evaluation, MANIFEST)
    front, rest = html[: html.index('id="curves"')], html[html.index('id="reverse"') :]
    section = rest[: rest.index("</section>")]
    assert "Leakage in reverse" in front
    wanted = (
        "Wrong way round", "raised to 5, 10 and 15\u00a0V behind a current limit of 0.1\u00a0A, "
        "and stayed at 15\u00a0V for 6\u00a0s", "<svg role", "15.00 V, after 6 s",
        "Forward drop before and after, leads put right", "Caution.",
    )  # fmt: skip
    places = [section.find(text) for text in wanted]
    assert -1 not in places
    assert places == sorted(places)
    last = section[section.index("15.00 V, after 6 s") :]
    assert "2.97 ± 0.15 mV" in last[: last.index("</tr>")]
    table = html[html.index('id="scenarios"') :]
    assert "reversed-source" in table[: table.index("</section>")]
    assert board_report(record, evaluation, MANIFEST) == html


def test_a_run_without_a_trial_does_not_speak_of_one(good: Made) -> None:
    html = board_report(*good, MANIFEST)
    assert 'id="reverse"' not in html
    assert "Wrong way round" not in html
    assert "forward drop and heat, one board" in html


def test_leads_left_crossed_stand_first_and_once(tmp_path: Path) -> None:
    text = "the leads <are> still crossed"
    board = Board(
        stage=REVERSED, reversal=Reversal(rungs=(), dwell=0, currents=()),
        events=(("reverse-conducts", "at 1 V it <conducts>"), ("left-reversed", text)),
    )  # fmt: skip
    html = board_report(*run(tmp_path / "run", board), MANIFEST)
    before = html[html.index("<body>") : html.index('id="events"')]
    assert before.index("leads were left crossed") < before.index("Can this board be signed off?")
    assert before.count("&lt;are&gt; still crossed") == 1
    assert "At 1\u00a0V it &lt;conducts&gt;" in before[before.index("Wrong way round") :]


def test_what_cannot_be_seen_is_not_called_above_the_band() -> None:
    band = {"nominal": 15e-9, "low": 1.2e-9, "high": 190e-9}
    faint = replace(ROW, unit="A", predicted=band, measured=80e-6, U=213e-6)
    shown = rescaled(faint, *shown_in("A", [faint]))
    assert shown.unit == "µA"
    assert figures_of(shown).band == "0.0012 to 0.19"
    assert place_in_band(shown) == "not seen"
    assert strip_of(shown) is None
    assert place_in_band(replace(shown, measured=300.0)) == "above"


def test_the_front_page_has_a_row_of_every_quantity_before_a_second_of_any() -> None:
    rows = [replace(ROW, condition=f"{k} A, 12 V supply") for k in range(60)]
    rows += [replace(ROW, name="reverse_leakage", unit="A")]
    front = front_page(rows, ["why"], [], 0, ["untested"])
    assert {row.name for row in front.rows} == {"drop", "reverse_leakage"}


def test_small_drops_are_shown_in_millivolts_whatever_the_board_itself_does() -> None:
    assert shown_in("V", [ROW, replace(ROW, measured=0.6)]) == (1e3, "mV")
    volts = {"nominal": 0.43, "low": 0.4, "high": 0.46}
    assert shown_in("V", [ROW, replace(ROW, predicted=volts)]) == (1.0, "V")
    assert shown_in("K", [ROW]) == (1.0, "K")
    assert figures_of(rescaled(ROW, 1e3, "mV")).measured == "53.86"


ROW = Measurand(
    "drop", "V", "3 A, 12 V supply", {"nominal": 0.054, "low": 0.045, "high": 0.065}, 0.05386,
    0.00086, 1.96, {"low": None, "high": 0.085}, "pass", 0.02, 0.9999,
)  # fmt: skip


def test_a_row_is_spelled_by_its_uncertainty() -> None:
    figures = figures_of(ROW)
    assert (figures.measured, figures.U) == ("0.05386", "0.00086")
    assert (figures.nominal, figures.band, figures.limit) == (
        "0.0540", "0.0450 to 0.0650", "≤ 0.085",
    )  # fmt: skip
    assert place_in_band(ROW) == "44 %"
    assert place_in_band(replace(ROW, measured=0.07)) == "above"
    assert place_in_band(replace(ROW, measured=None)) == ""


def test_a_strip_marks_what_lies_off_its_end() -> None:
    strip = strip_of(ROW)
    assert strip is not None
    assert strip.band is not None
    assert strip.outside == ""
    assert strip.band[0] < strip.value < strip.band[1] < strip.limits[0]
    far = strip_of(replace(ROW, measured=2.0))
    assert far is not None
    assert far.outside == "high"
    assert strip_of(replace(ROW, measured=None)) is None


def test_the_front_page_keeps_the_failed_rows_of_a_long_sweep() -> None:
    rows = [
        replace(ROW, condition=f"{k} A, 12 V supply", verdict="fail" if k in (57, 90) else "pass")
        for k in range(100)
    ]
    front = front_page(rows, ["why"] * 9, ["remark"] * 5, 0, ["untested"] * 3)
    assert {"57 A, 12 V supply", "90 A, 12 V supply"} <= {row.condition for row in front.rows}
    assert 10 < len(front.rows) < 30
    assert len(front.reasons) + len(front.reasons_behind) == 9
    assert len(front.remarks) + len(front.remarks_behind) == 5


def test_what_is_not_on_the_front_page_is_behind_it(tmp_path: Path) -> None:
    currents = ", ".join(f"{0.1 * k:.1f}" for k in range(1, 51))
    stage = CHANNEL.replace("[0.1, 0.2, 0.5, 1.0, 2.0, 3.0, 4.0, 5.0]", f"[{currents}]")
    record, evaluation = run(tmp_path / "run", Board(stage=stage))
    html = board_report(record, evaluation, MANIFEST)
    every = html[html.index('id="figures"') : html.index('id="ratings"')]
    rows = re.findall(r'<tr><td class="b">', every)
    assert len(rows) == len(evaluation.result.measurands) == 55


def test_shares_of_a_budget_add_up(good: Made) -> None:
    rows = good[1].result.measurands
    tables = budget_tables(rows)
    assert len(tables) == 7
    for table in tables:
        assert sum(line.share for line in table.rows) == pytest.approx(100.0)
    assert [len(table.heads) for table in drop_tables(rows)] == [8]


def test_plain_numbers_have_no_exponent() -> None:
    assert [plain(v) for v in (1234.5, 0.0321, 0.0)] == ["1234", "0.0321", "0"]
    assert degrees("case at 24.2 C, 3 Cats") == "case at 24.2\u00a0°C, 3 Cats"
