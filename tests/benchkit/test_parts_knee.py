"""The breakdown knee against its own equation, and the function that solves it against SciPy's."""

from __future__ import annotations

import decimal
from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import wrightomega

from benchkit.parts.diode import DiodeLaw
from benchkit.parts.knee import FAR_BELOW, KneeLaw
from benchkit.parts.omega import omega


def test_omega_is_that_of_scipy() -> None:
    z = np.concatenate([np.linspace(-30, 60, 9001), np.geomspace(60, 1e9, 2001)])
    assert omega(z) == pytest.approx(wrightomega(z), rel=1e-14)
    assert omega(z, 1) == pytest.approx(wrightomega(z), rel=2e-11)
    low = np.linspace(-690, -30, 6601)  # there it is exp(z), to the last bits of z
    assert omega(low) == pytest.approx(np.exp(low), rel=1e-12)


def test_omega_stays_finite_at_both_ends() -> None:
    ends = omega(np.array([-1e300, -1e4, 1e4, 1e150]))
    assert np.all(np.isfinite(ends))
    assert np.all(ends > 0)
    assert ends[3] == pytest.approx(1e150, rel=1e-12)


@settings(derandomize=True, deadline=None, max_examples=150)
@given(
    st.floats(2, 200), st.floats(-5, 0), st.floats(-2.5, -1), st.floats(-3, 3),
    st.floats(-40, 150), st.floats(-12, 3),
)  # fmt: skip
def test_current_meets_the_implicit_equation(
    volts: float, log_test: float, log_width: float, log_ohm: float, junction_C: float,
    log_amps: float,
) -> None:  # fmt: skip
    """Voltage from current in sixty digits, current from that voltage by the law."""
    law = KneeLaw(volts, 10**log_test, volts * 10**log_width, 10**log_ohm, 0.6e-3 * volts)
    bound = law.at(junction_C)
    with decimal.localcontext(prec=60):
        v, i, s, r = (
            Decimal(float(x))
            for x in (
                volts + law.tempco_V_per_K * (junction_C - 25), law.test_A, law.scale_V,
                law.series_ohm,
            )
        )  # fmt: skip

        def across(whole: Decimal) -> Decimal:
            return v + (whole - i) * r + s * (whole / i).ln()

        low, high = Decimal("1e-400"), Decimal(1000)
        for _ in range(64):  # what flows in the exponential at no voltage: I0
            middle = (low * high).sqrt()
            low, high = (middle, high) if across(middle) < 0 else (low, middle)
        rest, wanted = low, Decimal(10**log_amps)
        reverse = float(across(wanted + rest))
        share = (wanted + rest) * r
        slope = float(1 / (r + s / (wanted + rest)))
    if not 1e-6 < reverse < 1e3:
        return
    amps, steep = (float(x[0]) for x in bound.current(np.array([reverse])))
    # A last bit of volts is worth this much of the current.
    bit = 4e-16 * (reverse + volts) / float(s + share) * 10 + 1e-13
    assert amps == pytest.approx(float(wanted), rel=bit, abs=float(rest) * 1e-12)
    assert steep == pytest.approx(slope, rel=bit + 1e-12)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(st.floats(-1000, 1000), st.floats(0, 10), st.floats(2, 100), st.floats(-40, 150))
def test_current_never_falls_and_never_flows_the_other_way(
    reverse: float, step: float, volts: float, junction_C: float
) -> None:
    at = KneeLaw(volts, 1e-3, 0.05 * volts, 1.0, 1e-3).at(junction_C)
    amps, slope = at.current(np.array([reverse, reverse + step, 0.0]))
    assert 0 <= amps[0] <= amps[1]
    assert np.all(slope >= 0)
    assert amps[2] == 0.0


def test_dynamic_resistance_is_the_fixed_part_and_the_knee_over_the_current() -> None:
    law = KneeLaw(12.0, 5e-3, 0.1, 8.0)
    at = law.at(25.0)
    assert at.current(np.array([12.0]))[0][0] == pytest.approx(5e-3, rel=1e-9)
    assert 1 / at.current(np.array([12.0]))[1][0] == pytest.approx(8.0 + 0.1 / 5e-3, rel=1e-9)


def test_temperature_moves_the_voltage_by_its_coefficient() -> None:
    for tempco in (-2e-3, 10e-3):
        at = KneeLaw(12.0, 5e-3, 0.1, 8.0, tempco).at(np.array([25.0, 85.0]))
        amps = at.current(np.array([12.0, 12.0 + 60 * tempco]))[0]
        assert amps == pytest.approx([5e-3, 5e-3], rel=1e-9)


def test_nothing_far_below_the_knee() -> None:
    """Left out as a whole where it is far below: what is left out is below any resolution."""
    at = KneeLaw(30.0, 1e-3, 0.1, 5.0).at(25.0)
    edge = 30.0 + 0.1 * (FAR_BELOW + 1.0)
    off = at.current(np.linspace(-5, edge - 1, 7))
    assert not off[0].any()
    assert not off[1].any()
    mixed = at.current(np.array([edge - 1, 30.0]))[0]
    assert mixed[0] < 1e-30
    assert mixed[1] == pytest.approx(1e-3, rel=1e-9)


def test_a_diode_with_a_knee_is_both() -> None:
    knee = KneeLaw(15.0, 1e-3, 0.15, 1.0)
    plain = DiodeLaw(1e-12, 1.2, 0.1, 1.11, 3.0)
    both = DiodeLaw(1e-12, 1.2, 0.1, 1.11, 3.0, knee=knee)
    volts = np.array([-16.0, -15.0, -2.0, 0.0, 0.7])
    amps, slope = both.at(60.0).current(volts)
    of_plain, of_knee = plain.at(60.0).current(volts), knee.at(60.0).current(-volts)
    assert amps == pytest.approx(of_plain[0] - of_knee[0], rel=1e-15)
    assert slope == pytest.approx(of_plain[1] + of_knee[1], rel=1e-15)
    assert amps[1] == pytest.approx(-1e-3, rel=1e-5)
    assert amps[3] == 0.0
