"""A few trials of the fault campaign, and proof that each of its checks can fail."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import benchkit.guard.guard as guard_module
import procedures.verify as verify_module
from benchkit.evaluation.evaluate import Evaluation, evaluate
from benchkit.guard import Envelope
from benchkit.guard.outputs import Outputs
from benchkit.records.record import Record
from tests.campaigns.faults import MUST_BE_0, campaign, summed
from tests.campaigns.faults_draw import Fault, Trial
from tests.campaigns.faults_shop import FITTINGS
from tests.campaigns.faults_trial import Outcome, run_trials
from tests.campaigns.faults_truth import Seen, react
from tests.campaigns.faults_world import COLUMNS

TRIALS = 18
QUICK = "series-diode-quick"
TAKES_S = {QUICK: 5.0}


def test_a_few_random_faults_leave_nothing_on_and_pass_nothing_wrong(tmp_path: Path) -> None:
    outcomes = campaign(TRIALS, 5, 1, tmp_path, [QUICK], say=lambda _: None)
    found = summed(outcomes)
    wrong = [f"{o.sentence()}: {o.wrong}" for o in outcomes if o.wrong]
    assert not wrong, "\n".join(wrong)
    assert not any(found[key] for key in MUST_BE_0)
    assert found["trials"] == TRIALS
    # Not everything simply fails, nor passes, nor stops before anything is on.
    verdicts = Counter(outcome.verdict for outcome in outcomes)
    assert min(verdicts["pass"], verdicts["fail"], verdicts["undecided"]) >= 1, verdicts
    assert sum(outcome.energised for outcome in outcomes) > 0.6 * TRIALS
    assert found["sound"] == found["sound_passed"]
    assert len({family for outcome in outcomes for family in outcome.families}) > 8


def tried(folder: Path, *faults: Fault | None) -> list[Outcome]:
    """A trial for each, with that fault or none."""
    trials = [
        Trial(number, QUICK, FITTINGS[0], () if fault is None else (fault,), False)
        for number, fault in enumerate(faults)
    ]
    return run_trials(folder, TAKES_S, trials)


def kinds(outcome: Outcome) -> set[str]:
    return {key for key, _ in outcome.wrong}


def test_an_output_that_is_left_on_is_found(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A guard that sends nothing and takes everything for off."""

    def nothing(outputs: Outputs) -> list[str]:
        outputs._on = {}
        return []

    monkeypatch.setattr(Outputs, "all_off", nothing)
    monkeypatch.setattr(guard_module, "discharged", lambda *_: None)
    monkeypatch.setattr("benchkit.guard.guard.Guard.confirmed_off", True)
    (outcome,) = tried(tmp_path, None)
    assert outcome.on_at_end
    assert {"left_on_unreported", "false_off"} <= kinds(outcome)


def test_a_broken_board_that_is_passed_is_found(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def passes(record: Record, serial: str) -> Evaluation:
        found = evaluate(record, serial)
        return replace(found, result=replace(found.result, verdict="pass"))

    monkeypatch.setattr(verify_module, "evaluate", passes)
    shorted, lossy, floating, sound = tried(
        tmp_path,
        Fault("board", "short", 1.0),
        Fault("board", "drop-shift", 0.2),
        Fault("wiring", "lead-off:drop", 1.0, 0.5),
        None,
    )
    assert kinds(shorted) == kinds(lossy) == kinds(floating) == {"wrong_pass"}
    assert any("true drop at 2 A is 0.6" in text for _, text in lossy.wrong), lossy.wrong
    assert any("was read as 0.01" in text for _, text in floating.wrong), floating.wrong
    assert not kinds(sound)


ENVELOPE = Envelope("step", 12.0, 1.0, 13.0, 1.0, 100.0, 10.0, 60.0)


@contextmanager
def seen(**columns: float | np.ndarray) -> Iterator[Seen]:
    """On from 10 s to 40 s, a row every 0.5 s, with these values in it."""
    at = np.arange(0.0, 50.0, 0.5)
    rows = {name: np.zeros(at.size) for name in COLUMNS}
    rows.update({"at_s": at, "age_s": at, "supply_on": ((at >= 10) & (at < 40)).astype(float)})
    rows.update({name: value * np.ones(at.size) for name, value in columns.items()})
    trial = Trial(0, QUICK, FITTINGS[0], (), False)
    yield Seen(trial, rows, [(10.0, ENVELOPE)], 0.0, None, {}, False, False)


def test_how_long_a_reaction_took_is_read_from_what_was_so() -> None:
    at = np.arange(0.0, 50.0, 0.5)
    with seen(supply_voltage=12.0, supply_current=0.5) as sound:
        react(sound)
        assert sound.reactions == {}
    with seen(case=np.where(at >= 25, 110.0, 50.0)) as hot:
        react(hot)
        assert hot.reactions == {"case": pytest.approx(15.0)}
    with seen(case=np.where(at >= 25, 110.0, 50.0), wall_s=at / 10) as waited:
        react(waited)
        assert waited.reactions == {"case": pytest.approx(16.5)}
    with seen(guarded_voltage=np.where((at >= 20) & (at < 22), -1.0, 12.0)) as reversed_:
        react(reversed_)
        assert reversed_.reactions == {"guarded port": pytest.approx(2.0)}
