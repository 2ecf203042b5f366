"""Does the fuse save the clamp: each condition alone, and what is advised does hold."""

from __future__ import annotations

import json
import math
import re
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from benchkit.files.parts import Fuse
from benchkit.parts.fuse_points import STANDARDS, FuseModel, fuse_model
from benchkit.prediction.coordination import Coordination, coordinate, half_sine_A2s


def fuse(**changes: Any) -> FuseModel:
    table: dict[str, Any] = {
        "kind": "fuse", "standard": "ul-248-14", "rated_current_A": 5.0, "rated_voltage_V": 63.0,
        "breaking_A": 300.0, "cold_ohm": 0.015, "drop_V": 0.11, "melting_A2s": 18.0,
        "clearing_A2s": 30.0, "spread_percent": 25.0, **changes,
    }  # fmt: skip
    return fuse_model("F1", Fuse.model_validate(table))


def judge(model: FuseModel | None = None, **changes: Any) -> Coordination:
    """Of a circuit in which everything holds, with some figures changed.

    At 60 A, 12 times the rating, the printed melting I2t says all.
    """
    figures: dict[str, Any] = {
        "clamp_A2s": 200.0, "current_A": 60.0, "prospective_A": 250.0, "voltage_V": 14.0,
        "working_A": 3.0, "name": "F1", **changes,
    }  # fmt: skip
    return coordinate(model or fuse(), **figures)


def test_half_sine() -> None:
    """I2t = IFSM^2 t/2; at 8.3 ms 4.15e-3 IFSM^2 (common practice, no source); integrated."""
    assert half_sine_A2s(100.0, 8.3e-3) == pytest.approx(4.15e-3 * 100.0**2)
    from scipy.integrate import quad

    area, _ = quad(lambda t: (100.0 * math.sin(math.pi * t / 0.01)) ** 2, 0.0, 0.01)
    assert half_sine_A2s(100.0, 0.01) == pytest.approx(area)


def test_all_is_well() -> None:
    found = judge()
    assert found.coordinated
    assert found.notes == ()
    # By hand: I0 in the middle of 100 and 135 % of 5 A; the slowest melts with 1.25 * 18 A2s.
    fusing_square = 25.0 * 1.35
    tau = 1.25 * 18.0 / fusing_square
    melting = -tau * math.log(1 - fusing_square / 3600.0)
    assert found.clears_in_s == pytest.approx(melting + 1.25 * 12.0 / 3600.0)
    assert found.let_through_A2s == pytest.approx(3600.0 * found.clears_in_s)
    assert found.nuisance_margin == pytest.approx(1.25)


def test_smallest_current_heats_the_clamp_longest() -> None:
    """By its curve this fuse melts within 1 s at 8 A: 1.25 * (64 + 12) A2s."""
    model = fuse(points=[{"current_A": 8.0, "time_s": 1.0}])
    slow, quick = judge(model, current_A=8.0), judge(model, current_A=80.0)
    assert slow.clears_in_s > 50 * quick.clears_in_s
    assert slow.let_through_A2s == pytest.approx(1.25 * 76.0)
    assert slow.let_through_A2s > quick.let_through_A2s > 1.25 * 30.0
    # A battery's stiffer end changes only what has to be broken.
    stiff = judge(model, current_A=8.0, prospective_A=2000.0)
    assert stiff.let_through_A2s == pytest.approx(slow.let_through_A2s)
    assert slow.coordinated
    assert not stiff.coordinated


def test_without_a_printed_curve_it_lets_through_what_its_standard_allows() -> None:
    """An hour from 135 % on and 2 min from 200 % on (from memory, common catalogue knowledge): the
    worst is just below 10 A, wherever in between the source begins."""
    for least in (6.75, 8.0, 9.99):
        found = judge(current_A=least)
        assert found.clears_in_s == pytest.approx(3600.0 + 15.0 / least**2)
        assert found.let_through_A2s == pytest.approx(100.0 * 3600.0 + 15.0)
        assert not found.coordinated
    assert judge(current_A=10.0).clears_in_s == pytest.approx(120.0 + 0.15)
    # 30 A, two thirds of the way from 2 to 10 times its rating in logarithms.
    melting, up = 22.5 * 1.007 / 2500.0, math.log(3.0) / math.log(5.0)
    found = judge(current_A=30.0, clamp_A2s=100.0)
    assert found.clears_in_s == pytest.approx(
        120.0 ** (1 - up) * melting**up + 15.0 / 900.0, rel=0.01
    )
    assert not found.coordinated
    unprinted = "no more is promised of a UL 248-14 fuse without a point of its time-current curve"
    assert unprinted in found.notes[0]
    # A point in print says more: 0.03 s at 30 A are 1.25 * (27 + 12) A2s.
    printed = fuse(points=[{"current_A": 30.0, "time_s": 0.03}])
    better = judge(printed, current_A=30.0, clamp_A2s=100.0)
    assert better.let_through_A2s == pytest.approx(1.25 * 39.0)
    assert better.coordinated
    assert unprinted not in judge(printed, current_A=30.0, clamp_A2s=20.0).notes[0]


def test_too_much_let_through() -> None:
    found = judge(clamp_A2s=20.0)
    assert not found.coordinated
    assert found.notes[0] == (
        "F1 lets through up to 37.6 A2s, and the clamp stands 20 A2s: at 60 A it takes up to "
        "10.4 ms to clear"
    )
    assert len(found.notes) == 2


SECONDS = {"ms": 1e-3, "s": 1.0, "min": 60.0}


def advised(advice: str) -> tuple[float, ...]:
    """Rated from and to, melting I2t, breaking capacity, and time to melt, nan if none is asked."""
    wanted = re.search(
        r"rated between (\S+) and (\S+) A, with a melting I2t below (\S+) A2s, (?:whose printed "
        r"curve has it melt within (\S+) (ms|s|min) at \S+ A, )?with a breaking capacity of at "
        r"least (\S+) A at \S+ V, which still carries \S+ A, would do",
        advice,
    )
    assert wanted is not None, advice
    low, high, melting, time, unit, breaking = wanted.groups()
    seconds = float(time) * SECONDS[unit] if time else math.nan
    return float(low), float(high), float(melting), float(breaking), seconds


def test_advised_fuse_would_do() -> None:
    """Only the figures of the advice are changed, and everything holds."""
    found = judge(clamp_A2s=20.0, prospective_A=900.0)
    low, high, melting, breaking, seconds = advised(found.notes[-1])
    assert (low, high) == (4.0, 6.0)  # from 60 A on, ten times 6 A, the melting I2t is enough
    assert math.isnan(seconds)
    better = fuse(melting_A2s=melting, clearing_A2s=melting * 30 / 18, breaking_A=breaking)
    assert judge(better, clamp_A2s=20.0, prospective_A=900.0).coordinated
    worse = fuse(melting_A2s=1.02 * melting, clearing_A2s=1.02 * melting * 30 / 18)
    assert not judge(worse, clamp_A2s=20.0).coordinated


def test_advised_fuse_needs_a_printed_curve_near_its_rating() -> None:
    """At 30 A nothing is known of a fuse of 4 A or more without one."""
    figures: dict[str, Any] = {"clamp_A2s": 50.0, "current_A": 30.0}
    low, high, melting, breaking, seconds = advised(judge(**figures).notes[-1])
    assert (low, high, breaking) == (4.0, 22.2, 250.0)
    # Its own figures hold each other: what has melted at 30 A took its melting I2t at least.
    assert 900.0 * seconds > melting
    assert 1.25 * (900.0 * seconds + melting * 12 / 18) == pytest.approx(50.0, rel=0.01)
    changes: dict[str, Any] = {"melting_A2s": melting, "clearing_A2s": melting * 30 / 18}

    def printed(time_s: float) -> FuseModel:
        return fuse(**changes, points=[{"current_A": 30.0, "time_s": time_s}])

    assert judge(printed(seconds), **figures).coordinated
    assert not judge(printed(1.02 * seconds), **figures).coordinated
    assert not judge(fuse(**changes), **figures).coordinated


@settings(derandomize=True, deadline=None, max_examples=150)
@given(
    st.sampled_from(["ul-248-14", "iec-60127-2"]), st.floats(5, 2000), st.floats(2, 100),
    st.floats(1, 6), st.floats(0, 1), st.floats(0, 60), st.floats(1, 4),
)  # fmt: skip
def test_any_fuse_within_the_advice_would_do(
    standard: str, amps: float, clamp_A2s: float, working_A: float, where: float, spread: float,
    arcing: float,
) -> None:  # fmt: skip
    """Of any rating in the range that is advised, with the advised figures and no better ones."""
    kind: dict[str, Any] = {"standard": standard, "spread_percent": spread, "drop_V": None}
    figures: dict[str, Any] = {
        "current_A": amps, "prospective_A": 3 * amps, "clamp_A2s": clamp_A2s,
        "working_A": working_A,
    }  # fmt: skip
    found = judge(fuse(**kind, clearing_A2s=arcing * 18.0), **figures)
    of = STANDARDS[standard]
    assume(found.notes)
    if working_A / of.worked_at > amps / of.surely_opens:
        assert found.notes[-1].startswith(f"no {of.name} fuse does both")
        return
    low, high, melting, breaking, seconds = advised(found.notes[-1])
    rated = low * (high / low) ** where
    assume(melting < 10.0 * rated**2)  # there is no slower fuse, by its standard's gates
    better = fuse(
        **kind, rated_current_A=rated, melting_A2s=melting, clearing_A2s=arcing * melting,
        points=[] if math.isnan(seconds) else [{"current_A": amps, "time_s": seconds}],
        breaking_A=breaking,
    )  # fmt: skip
    judged = judge(better, **figures)
    assert judged.coordinated
    assert judged.notes == ()


def test_breaking_capacity_and_voltage() -> None:
    found = judge(prospective_A=1200.0)
    assert not found.coordinated
    assert found.notes[0] == (
        "F1 can break 300 A, and up to 1200 A can flow: it may arc on or burst"
    )
    assert "a breaking capacity of at least 1200 A" in found.notes[1]
    found = judge(voltage_V=70.0)
    assert not found.coordinated
    assert found.notes[0] == "F1 is rated 63 V, and 70 V stand across it once it is open"


def test_a_source_that_never_opens_it() -> None:
    found = judge(current_A=4.0, prospective_A=4.0)
    assert not found.coordinated
    assert found.clears_in_s == math.inf
    assert found.notes[0] == (
        "the source drives 4 A at least, and F1 does not open at that: a UL 248-14 fuse of 5 A is "
        "sure to open from 6.75 A on only (1.35 times its rating); the clamp goes on conducting"
    )
    assert found.notes[1] == (
        "no UL 248-14 fuse does both: to carry 3 A it has to be rated 4 A or more, and to open at "
        "4 A 2.96 A or less; a stage that blocks instead of clamping needs no fuse for this"
    )


def test_a_source_that_may_open_it() -> None:
    found = judge(current_A=6.5)
    assert not found.coordinated
    assert "at that F1 may stay whole" in found.notes[0]
    assert "a typical one melts in about" in found.notes[0]
    assert "rated between 4 and 4.81 A" in found.notes[1]


def test_no_surge_rating() -> None:
    found = judge(clamp_A2s=None)
    assert not found.coordinated
    assert found.notes == (
        "no surge rating of the clamp is given: whether it stands the 37.6 A2s that F1 lets "
        "through cannot be said",
    )


@pytest.mark.parametrize(("standard", "most"), [("ul-248-14", 3.75), ("iec-60127-2", 5.0)])
def test_rated_current_rules(standard: str, most: float) -> None:
    """Common practice, no source: UL 248-14 at 75 % of its rating, IEC 60127-2 at 100 %."""
    model = fuse(standard=standard)
    for working, good in ((most * 0.999, True), (most * 1.001, False)):
        found = judge(model, working_A=working)
        assert found.working_allowed_A == pytest.approx(most)
        assert (found.nuisance_margin >= 1) == good
        assert any("now and then without cause" in note for note in found.notes) != good
        # Opening without cause is no danger to the clamp.
        assert found.coordinated
    assert judge(model, ambient_C=75.0).working_allowed_A == pytest.approx(0.8 * most)


def test_document_is_json() -> None:
    for found in (judge(), judge(current_A=4.0), judge(clamp_A2s=None)):
        document = json.loads(json.dumps(found.document(), allow_nan=False))
        for key in (
            "clears_in_s", "let_through_A2s", "clamp_A2s", "prospective_A", "breaking_A",
            "coordinated",
        ):  # fmt: skip
            assert key in document
        assert document["notes"] == list(found.notes)
    assert judge(current_A=4.0).document()["clears_in_s"] is None


@settings(derandomize=True, deadline=None, max_examples=150)
@given(
    st.floats(0.1, 1e4), st.floats(1, 100), st.floats(1, 1e4), st.floats(0.1, 10),
    st.floats(1.05, 4),
)  # fmt: skip
def test_a_worse_case_is_never_coordinated_where_a_better_is_not(
    amps: float, ratio: float, clamp_A2s: float, working_A: float, worse: float
) -> None:
    points = [{"current_A": 10.0, "time_s": 4.0}, {"current_A": 30.0, "time_s": 0.1}]
    figures: dict[str, Any] = {
        "current_A": amps, "prospective_A": amps * ratio, "clamp_A2s": clamp_A2s,
        "working_A": working_A,
    }  # fmt: skip
    found = judge(fuse(points=points), **figures)
    assert found.coordinated == (
        amps >= 6.75 and found.let_through_A2s <= clamp_A2s and amps * ratio <= 300.0
    )
    assert bool(found.notes) == (not found.coordinated or found.nuisance_margin < 1)
    changes: tuple[dict[str, Any], ...] = (
        {"clamp_A2s": clamp_A2s / worse}, {"prospective_A": amps * ratio * worse},
        {"current_A": amps / worse}, {"voltage_V": 14.0 * worse},
    )  # fmt: skip
    for change in changes:
        other = judge(fuse(points=points), **{**figures, **change})
        assert found.coordinated or not other.coordinated
    inner = np.geomspace(amps, amps * ratio, 97)
    if math.isfinite(found.let_through_A2s):
        through = fuse(points=points).slowest_clearing_A2s(inner)
        assert through.max() <= found.let_through_A2s * (1 + 1e-9)


def test_figures_that_make_no_sense() -> None:
    for key, value in (("current_A", 0.0), ("prospective_A", 10.0), ("working_A", 0.0)):
        changes: dict[str, Any] = {key: value}
        with pytest.raises(ValueError, match="must be above 0"):
            judge(**changes)
