"""The fuse law against its own differential equation, its asymptotes and the standards' gates."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from pydantic import ValidationError

from benchkit.errors import InputError
from benchkit.files.parts import Fuse
from benchkit.parts.fuse import FuseAt, FuseLaw
from benchkit.parts.fuse_points import FuseModel, fuse_model

Floats = NDArray[np.float64]

LAW = FuseLaw(0.02, 0.8, 6.0, 0.5, 18.0)

SHEET: Mapping[str, Any] = {
    "kind": "fuse", "standard": "ul-248-14", "rated_current_A": 5.0, "rated_voltage_V": 63.0,
    "breaking_A": 300.0, "cold_ohm": 0.015, "drop_V": 0.11, "melting_A2s": 18.0,
    "clearing_A2s": 30.0, "spread_percent": 25.0,
    "points": [{"current_A": 10.0, "time_s": 0.5}, {"current_A": 25.0, "time_s": 0.035}],
}  # fmt: skip


def model(**changes: object) -> FuseModel:
    """Of the sheet above with some keys changed; None takes a key away."""
    kept = {key: value for key, value in {**SHEET, **changes}.items() if value is not None}
    return fuse_model("F1", Fuse.model_validate(kept))


@pytest.mark.parametrize("amps", [6.01, 8.0, 20.0, 300.0])
def test_closed_form_against_the_differential_equation(amps: float) -> None:
    """d theta/dt = ((I/I0)^2 - theta)/tau from 0 to 1, integrated by scipy."""
    from scipy.integrate import solve_ivp

    def rate(_t: float, theta: Floats) -> Floats:
        return ((amps / 6.0) ** 2 - theta) / 0.5

    def melted(_t: float, theta: Floats) -> float:
        return float(theta[0]) - 1.0

    found = solve_ivp(
        rate, (0.0, 10.0), [0.0], method="DOP853", events=melted, rtol=1e-11, atol=1e-13
    )
    assert found.t_events is not None
    assert float(LAW.time_to_melt_s(amps)) == pytest.approx(found.t_events[0][0], rel=1e-6)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(st.floats(1e-3, 1e3), st.floats(1e-4, 100), st.floats(1e3, 1e6))
def test_large_currents_are_adiabatic(fusing: float, tau: float, ratio: float) -> None:
    """I2t tends to tau I0^2: next term of the logarithm's series is half the ratio's square."""
    law = FuseLaw(1.0, 0.0, fusing, tau, 0.0)
    amps = fusing * ratio
    let_through = amps**2 * float(law.time_to_melt_s(amps))
    assert let_through / (tau * fusing**2) - 1 == pytest.approx(0.5 / ratio**2, rel=1e-2, abs=4e-16)
    assert law.melting_A2s == pytest.approx(tau * fusing**2)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(st.floats(0.01, 1e5), st.floats(1.0001, 100))
def test_melts_sooner_at_a_larger_current_with_less_heat(amps: float, ratio: float) -> None:
    first, second = (float(LAW.time_to_melt_s(a)) for a in (amps, amps * ratio))
    assert second < first or first == second == math.inf
    if math.isfinite(first):
        assert amps**2 * first * (1 + 1e-12) >= (amps * ratio) ** 2 * second
        assert amps**2 * first >= float(LAW.melting_A2s) * (1 - 1e-12)


def test_never_at_or_below_the_opening_current() -> None:
    near = np.array([0.0, 5.999, 6.0, np.nextafter(6.0, 7.0)])
    times = LAW.time_to_melt_s(near)
    assert np.isinf(times[:3]).all()
    assert 15 < times[3] < 20


VOLTS = st.one_of(st.floats(-1e3, 1e3), st.floats(-0.5, 0.5), st.floats(-1e-9, 1e-9))
RATIOS = st.one_of(st.just(0.0), st.floats(1e-6, 20))


@settings(derandomize=True, deadline=None, max_examples=300)
@given(VOLTS, st.floats(1e-4, 10), RATIOS, st.floats(0.05, 50))
def test_current_meets_its_resistance_and_its_slope(
    volts: float, cold: float, ratio: float, fusing: float
) -> None:
    at = FuseAt(cold, ratio, fusing)
    amps, slope = (float(v[0]) for v in at.current(np.array([volts])))
    warmth = min((amps / fusing) ** 2, 1.0)
    assert amps * cold * (1 + ratio * warmth) == pytest.approx(volts, rel=1e-12, abs=1e-300)
    assert -float(at.current(np.array([-volts]))[0][0]) == amps
    edge = fusing * cold * (1 + ratio)
    step = 1e-5 * max(abs(volts), edge * 1e-3)
    if abs(abs(volts) - edge) > 2 * step:
        up, down = (float(at.current(np.array([volts + d]))[0][0]) for d in (step, -step))
        assert (up - down) / (2 * step) == pytest.approx(slope, rel=1e-6)


def test_resistance_is_continuous_where_it_would_melt() -> None:
    at = LAW.at(25.0)
    edge = 6.0 * 0.02 * 1.8
    below, above = at.current(np.array([edge * (1 - 1e-12), edge * (1 + 1e-12)]))[0]
    assert below == pytest.approx(6.0, rel=1e-9)
    assert above == pytest.approx(6.0, rel=1e-9)


def test_cold_resistance_follows_the_ambient() -> None:
    """About 0.38 % per kelvin at 25 C for a pure metal (handbooks, from memory)."""
    ohms = LAW.at(np.array([25.0, 75.0])).cold_ohm
    assert ohms == pytest.approx([0.02, 0.0238])


def test_sheet_is_reproduced() -> None:
    found = model()
    law = found.typical
    assert law.melting_A2s == pytest.approx(18.0)
    assert law.arcing_A2s == pytest.approx(12.0)
    volts = np.array([0.11])
    assert law.at(25.0).current(volts)[0] == pytest.approx([5.0])
    for point in found.part.points:
        assert 0.4 < float(law.time_to_melt_s(point.current_A)) / point.time_s < 1.5


def test_points_that_are_the_laws_own_give_it_back() -> None:
    truth = FuseLaw(1.0, 0.0, 6.0, 0.5, 0.0)
    amps = (6.8, 9.0, 15.0, 40.0)
    points = [{"current_A": a, "time_s": float(truth.time_to_melt_s(a))} for a in amps]
    found = model(points=points).typical
    assert found.fusing_A == pytest.approx(6.0, rel=1e-5)
    assert found.melting_s == pytest.approx(0.5, rel=1e-5)


@pytest.mark.parametrize(
    ("standard", "carries", "gates"),
    [
        ("ul-248-14", 1.0, [(1.35, 3600.0), (2.0, 120.0)]),
        ("iec-60127-2", 1.5, [(2.1, 1800.0)]),
    ],
)
@settings(derandomize=True, deadline=None, max_examples=40)
@given(st.floats(0.05, 25), st.floats(0.05, 10))
def test_gates_of_the_standards(
    standard: str, carries: float, gates: list[tuple[float, float]], rated: float, times: float
) -> None:
    """From memory, common catalogue knowledge: UL 248-14 opens at 135 % within 1 h and at 200 %
    within 2 min; IEC 60127-2 holds 150 % for 1 h and opens at 210 % within 30 min."""
    found = model(
        standard=standard, rated_current_A=rated, melting_A2s=times * rated**2, points=None,
        drop_V=None, clearing_A2s=None,
    )  # fmt: skip
    for score in (-3.0, 0.0, 3.0):
        law = found.sample(np.zeros(1), np.array([score]), np.zeros(1))
        assert law.time_to_melt_s(carries * rated)[0] == math.inf
        for gate, within_s in gates:
            assert law.time_to_melt_s(gate * rated)[0] < within_s


def test_spread_is_that_of_the_melting_energy() -> None:
    slow = model().sample(np.array([3.0]), np.array([3.0]), np.zeros(1))
    assert slow.melting_A2s == pytest.approx([18.0 * 1.25])
    assert slow.cold_ohm == pytest.approx([0.015 * 1.15])
    assert model().slowest.melting_A2s == pytest.approx(18.0 * 1.25)
    assert model().fastest.melting_A2s == pytest.approx(18.0 * 0.75)
    assert model().slowest.arcing_A2s == pytest.approx(12.0 * 1.25)


def test_slowest_clearing_is_never_sooner_than_a_printed_point() -> None:
    """A slow fuse has more than one time constant: its points say so, the law does not."""
    slow = model(points=[{"current_A": 10.0, "time_s": 8.0}, {"current_A": 20.0, "time_s": 0.4}])
    for amps, seconds in ((10.0, 8.0), (20.0, 0.4)):
        assert float(slow.slowest_melt_s(amps)) == pytest.approx(1.25 * seconds)
        arcing = 12.0 * 1.25 / amps**2
        assert float(slow.slowest_clearing_s(amps)) == pytest.approx(1.25 * seconds + arcing)
    assert any("its point at 10 A melts in 8 s" in note for note in slow.notes)
    # At short-circuit currents it is the clearing I2t of the sheet, with its spread.
    assert float(slow.slowest_clearing_A2s(1e4)) == pytest.approx(1.25 * 30.0, rel=1e-4)


@pytest.mark.parametrize(
    ("standard", "rated", "gates"),
    [
        ("ul-248-14", 5.0, [(1.35, 3600.0), (2.0, 120.0)]),
        ("ul-248-14", 40.0, [(1.35, 3600.0)]),  # the 2 min are for ratings up to 30 A
        ("iec-60127-2", 5.0, [(2.1, 1800.0)]),
    ],
)
def test_without_points_no_more_is_promised_than_the_gates(
    standard: str, rated: float, gates: list[tuple[float, float]]
) -> None:
    """Gates as above; from the last one a straight line in logarithms to ten times the rating,
    where melting I2t is printed."""
    found = model(
        standard=standard, rated_current_A=rated, melting_A2s=0.7 * rated**2, points=None,
        clearing_A2s=None, drop_V=None,
    )  # fmt: skip
    first, (last, seconds) = gates[0][0], gates[-1]
    assert math.isinf(found.slowest_melt_s(0.999 * first * rated))
    for multiple, within_s in gates:
        assert float(found.slowest_melt_s(multiple * rated)) == pytest.approx(within_s)
    assert last == first or float(found.slowest_melt_s(0.999 * last * rated)) == 3600.0
    law = found.slowest.time_to_melt_s
    between = float(found.slowest_melt_s(math.sqrt(10.0 * last) * rated))
    assert between == pytest.approx(math.sqrt(seconds * float(law(10.0 * rated))))
    for amps in (10.0 * rated, 30.0 * rated, 1000.0 * rated):
        assert float(found.slowest_melt_s(amps)) == pytest.approx(float(law(amps)))


def test_below_its_first_printed_point_the_gates_hold_too() -> None:
    """A straight line from 120 s at 10 A to the 1.25 * 0.1 s of the first point, at 20 A."""
    found = model(points=[{"current_A": 20.0, "time_s": 0.1}, {"current_A": 40.0, "time_s": 0.014}])
    assert float(found.slowest_melt_s(20.0)) == pytest.approx(1.25 * 0.1)
    assert float(found.slowest_melt_s(math.sqrt(200.0))) == pytest.approx(math.sqrt(120.0 * 0.125))
    assert float(found.slowest_melt_s(9.99)) == pytest.approx(3600.0)
    early = model(points=[{"current_A": 8.0, "time_s": 2.0}])
    assert early.slowest_melt_s(np.array([7.9, 8.0])) == pytest.approx([3600.0, 1.25 * 2.0])
    assert float(early.slowest_melt_s(10.0)) < 1.25 * 2.0


@settings(derandomize=True, deadline=None, max_examples=100)
@given(st.floats(5, 1e4), st.floats(1.0001, 10), st.sampled_from(["none", "late", "early"]))
def test_the_slowest_fuse_melts_sooner_at_more_and_never_before_the_law(
    amps: float, ratio: float, printed: str
) -> None:
    early = {"current_A": 8.0, "time_s": 2.0}, {"current_A": 25.0, "time_s": 0.04}
    points = {"none": (), "late": early[1:], "early": early}
    found = model(points=list(points[printed]))
    one, two = (float(found.slowest_melt_s(a)) for a in (amps, amps * ratio))
    assert one >= max(two, float(found.slowest.time_to_melt_s(amps)))


def test_what_is_assumed_is_said() -> None:
    notes = " / ".join(
        model(points=None, clearing_A2s=None, drop_V=None, spread_percent=None).notes
    )
    for words in (
        "no points of its time-current curve", "no clearing I2t is printed; 2 times",
        "no drop at the rated current", "30 % either way is taken",
    ):  # fmt: skip
        assert words in notes


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        (
            {"points": [{"current_A": 5.0, "time_s": 10.0}]},
            "parts.F1.points has 10 s at 5 A: a fuse of UL 248-14 rated 5 A must carry 1 times "
            "that for 4 h; check the current, or standard",
        ),
        (
            {"points": [{"current_A": 10.0, "time_s": 500.0}]},
            "parts.F1.points has 500 s at 10 A: a fuse of UL 248-14 rated 5 A must open within "
            "120 s at 2 times that; check the time, or standard",
        ),
        (
            {"points": [{"current_A": 20.0, "time_s": 0.01}]},
            "parts.F1.points contradicts melting_A2s 18: 0.01 s at 20 A are 4 A2s only, and no "
            "current melts a fuse with less than its melting I2t",
        ),
        (
            {"drop_V": 0.05},
            "parts.F1.drop_V is 0.05: its cold_ohm alone drops 0.075 V at the rated current, and a "
            "warm fuse drops more",
        ),
    ],
)
def test_contradictions_are_named(changes: dict[str, object], message: str) -> None:
    with pytest.raises(InputError) as caught:
        model(**changes)
    assert str(caught.value) == message


def test_milliseconds_for_seconds_and_a_hundredfold_energy() -> None:
    with pytest.raises(InputError, match=r"points contradicts melting_A2s 18: .* not millisec"):
        model(points=[{"current_A": 40.0, "time_s": 12.0}])
    with pytest.raises(InputError, match=r"would take .* UL 248-14 has it open within 120 s"):
        model(points=None, clearing_A2s=None, melting_A2s=18000.0)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"clearing_A2s": 10.0}, "must not be below melting_A2s 18"),
        (
            {"points": [{"current_A": 10.0, "time_s": 1.0}, {"current_A": 20.0, "time_s": 2.0}]},
            "a fuse melts sooner at a larger current",
        ),
    ],
)
def test_tables_that_make_no_sense(changes: dict[str, object], words: str) -> None:
    with pytest.raises(ValidationError, match=words):
        model(**changes)
