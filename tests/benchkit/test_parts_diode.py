"""The junction law and its fit to a sheet's points."""

from __future__ import annotations

import decimal
from dataclasses import replace
from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pvlib.pvsystem import i_from_v

from benchkit.errors import InputError
from benchkit.files.parts import Diode
from benchkit.parts.diode import DiodeLaw, thermal_voltage
from benchkit.parts.diode_points import diode_model
from benchkit.parts.knee import KneeLaw
from tests.benchkit.example_stages import SCHOTTKY, stage_file


def part(*changes: tuple[str, str]) -> Diode:
    found = stage_file(SCHOTTKY, *changes).parts["D1"]
    assert isinstance(found, Diode)
    return found


def law() -> DiodeLaw:
    return diode_model("D1", part()).typical


def test_printed_forward_points_are_reproduced() -> None:
    model = diode_model("D1", part())
    for point in part().forward:
        typical = float(model.typical.forward_V(point.current_A, point.junction_C))
        assert typical == pytest.approx(point.typ_V, rel=0.002)
        if point.max_V is not None:
            most = float(model.worst.forward_V(point.current_A, point.junction_C))
            assert most == pytest.approx(point.max_V, rel=0.02)


def test_printed_leakage_is_reproduced() -> None:
    """At the terminals: the saturation current does not come on top of it."""
    model = diode_model("D1", part())
    for point in part().leakage:
        volts = np.array([-point.reverse_V])
        typical = -model.typical.at(point.junction_C).current(volts)[0][0]
        assert typical == pytest.approx(point.typ_A, rel=1e-6)
        if point.max_A is not None:
            most = -model.worst.at(point.junction_C).current(volts)[0][0]
            assert most == pytest.approx(point.max_A, rel=1e-6)


def test_leakage_points_at_two_voltages_give_its_growth() -> None:
    second = "{ reverse_V = 10, typ_A = 8e-6 },\n  { reverse_V = 40, typ_A = 8e-3, junction"
    model = diode_model("D1", part(("{ reverse_V = 40, typ_A = 8e-3, junction", second)))
    leak = -model.typical.at(25.0).current(np.array([-10.0, -40.0]))[0]
    assert leak == pytest.approx([8e-6, 20e-6], rel=1e-6)
    assert not any("square root" in note for note in model.notes)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(
    st.floats(-45, 1.2), st.floats(1e-6, 0.5), st.floats(-40, 250), st.floats(1e-9, 1e-2)
)  # fmt: skip
def test_current_never_falls_as_voltage_rises(
    volts: float, step: float, junction_C: float, leakage_A: float
) -> None:
    """Whatever the leakage is beside the saturation current: a junction is passive."""
    tried = DiodeLaw(1e-6, 1.05, 0.02, 0.69, 2.0, leakage_A=leakage_A, leakage_V=40.0)
    amps, slope = tried.at(junction_C).current(np.array([volts, volts + step]))
    assert amps[1] >= amps[0]
    assert np.all(slope >= 0)
    assert np.all(np.sign(amps) * np.sign([volts, volts + step]) >= 0)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(st.floats(1e-6, 20), st.floats(1.001, 100), st.floats(-40, 150), st.floats(-3, 3))
def test_drop_rises_with_current(
    amps: float, ratio: float, junction_C: float, score: float
) -> None:
    sampled = diode_model("D1", part()).sample(np.array([score]), np.zeros(1), np.zeros(1))
    low, high = (float(sampled.forward_V(a, junction_C)[0]) for a in (amps, amps * ratio))
    assert 0 < low < high


@pytest.mark.parametrize("technology", ["schottky", "silicon"])
def test_drop_falls_by_millivolts_per_kelvin_at_a_small_current(technology: str) -> None:
    """Common practice, no source: 1 to 3 mV/K, mostly about 2."""
    volts = "0.36" if technology == "schottky" else "0.72"
    text = ("{ current_A = 1, typ_V = 0.28, junction_C = 125 },", "")
    rise = 0.0 if technology == "schottky" else 0.36
    changes = [
        text, ('technology = "schottky"', f'technology = "{technology}"'),
        ("typ_V = 0.26, max_V = 0.31", f"typ_V = {0.26 + rise}"),
        ("typ_V = 0.36, max_V = 0.42", f"typ_V = {volts}"),
        ("typ_V = 0.45, max_V = 0.52", f"typ_V = {0.45 + rise}"),
    ]  # fmt: skip
    typical = diode_model("D1", part(*changes)).typical
    drop = typical.forward_V(0.001, np.array([25.0, 26.0]))
    assert -3e-3 < drop[1] - drop[0] < -1e-3


def test_current_and_drop_are_inverse_of_each_other() -> None:
    amps = np.geomspace(1e-6, 10, 30)
    tried = law()
    assert tried.at(60.0).current(tried.forward_V(amps, 60.0))[0] == pytest.approx(amps, rel=1e-9)


def test_no_current_at_no_voltage() -> None:
    """Exactly: hot, where the saturation current is large, a difference would leave some."""
    assert DiodeLaw(1e-4, 1.05, 0.05, 0.69, 2.0).at(250.0).current(np.zeros(1))[0][0] == 0.0


@settings(derandomize=True, deadline=None, max_examples=60)
@given(
    st.floats(-16, -2), st.floats(1, 2.2), st.floats(-5, 1), st.floats(-40, 150)
)  # fmt: skip
def test_current_is_that_of_pvlib(
    log_saturation: float, ideality: float, log_ohm: float, junction_C: float
) -> None:
    """A solar cell in the dark, as pvlib 0.11 or later solves it by the Lambert W function."""
    saturation, ohms = 10**log_saturation, 10**log_ohm
    scale = ideality * float(thermal_voltage(junction_C))
    volts = scale * np.array([-20.0, -1.0, -0.1, 0.1, 1.0, 5.0, 20.0, 35.0])
    theirs = -i_from_v(volts, 0.0, saturation, ohms, np.inf, scale)
    law = DiodeLaw(saturation, ideality, ohms, 0.69, 2.0)
    # Its saturation current at this temperature, so that both start from the same number.
    law = replace(law, saturation_A=saturation**2 / float(np.exp(law.log_saturation(junction_C))))
    ours = law.at(junction_C).current(volts)[0]
    assert ours == pytest.approx(theirs, rel=1e-8, abs=1e-9 * saturation)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(
    st.floats(-20, -2), st.floats(1, 2.5), st.floats(-6, 2), st.floats(-80, 250),
    st.floats(-1000, 1000),
)  # fmt: skip
def test_current_and_slope_meet_the_law_itself(
    log_saturation: float, ideality: float, log_ohm: float, junction_C: float, volts: float
) -> None:
    """Worked out the other way round in fifty digits: voltage from the inner junction's."""
    law = DiodeLaw(10**log_saturation, ideality, 10**log_ohm, 0.69, 2.0).at(junction_C)
    amps, slope = (float(x[0]) for x in law.current(np.array([volts])))
    with decimal.localcontext(prec=60):
        saturation, scale, ohms = (
            Decimal(float(x)) for x in (law.saturation_A, law.scale_V, law.series_ohm)
        )
        low, high = sorted([Decimal(0), Decimal(volts) / scale])
        high = min(high, (1 + high * scale / (saturation * ohms)).ln()) if volts > 0 else high
        for _ in range(170):
            middle = (low + high) / 2
            across = middle * scale + ohms * saturation * (middle.exp() - 1)
            low, high = (middle, high) if across < Decimal(volts) else (low, middle)
        inner = (saturation / scale) * low.exp()
        exact_amps = float(saturation * (low.exp() - 1))
        exact_slope = float(inner / (1 + inner * ohms))
    # A last bit of volts is worth that much where the current grows by e every scale_V.
    last_bits = 1e-13 * (1 + min(abs(volts) / float(law.scale_V), 2000))
    assert amps == pytest.approx(exact_amps, rel=last_bits, abs=1e-55 * float(law.saturation_A))
    assert slope == pytest.approx(exact_slope, rel=1e-10 + last_bits, abs=1e-290)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(st.floats(-60, 1.5), st.floats(-40, 150), st.floats(1e-8, 1e-2), st.booleans())
def test_slope_is_the_derivative_with_leakage_and_knee(
    volts: float, junction_C: float, leakage_A: float, breaks: bool
) -> None:
    knee = KneeLaw(33.0, 1e-3, 0.2, 2.0, 0.03) if breaks else None
    law = DiodeLaw(
        1e-9, 1.3, 0.02, 0.9, 2.0, leakage_A=leakage_A, leakage_V=30.0, leakage_power=0.8, knee=knee
    )
    # Symmetric differences of two steps, extrapolated; off the corner at no voltage.
    volts = volts if abs(volts) > 0.01 else 0.01
    step = 1e-4 * np.array([1.0, -1.0, 2.0, -2.0])
    at = law.at(junction_C)
    amps, _ = at.current(volts + step)
    near, far = (amps[0] - amps[1]) / 2e-4, (amps[2] - amps[3]) / 4e-4
    slope = at.current(np.array([volts]))[1][0]
    assert slope == pytest.approx((4 * near - far) / 3, rel=1e-6, abs=1e-11 * np.abs(amps).max())


def test_a_batch_is_its_entries() -> None:
    """Solvers drop entries that have converged: the others may not move by that."""
    volts = np.linspace(-40.0, 1.0, 41)
    knee = KneeLaw(33.0, 1e-3, 0.2, 2.0)
    law = DiodeLaw(np.geomspace(1e-9, 1e-6, 41), 1.1, 0.05, 0.69, 2.0, 1e-6, 30.0, knee=knee)
    whole = law.at(np.linspace(-40, 150, 41)).current(volts)
    for entry in (0, 10, 40):
        one = replace(law, saturation_A=np.asarray(law.saturation_A)[entry : entry + 1])
        alone = one.at(np.linspace(-40, 150, 41)[entry : entry + 1]).current(
            volts[entry : entry + 1]
        )
        assert [float(x[0]) for x in alone] == pytest.approx(
            [float(x[entry]) for x in whole], rel=1e-14
        )


def test_surge_is_its_half_sine_or_what_is_printed() -> None:
    """The square of a half-sine's current over its width: peak squared times half the width."""
    found = part(("reverse_voltage_max_V", "surge_current_max_A = 80\nreverse_voltage_max_V"))
    time = np.linspace(0, 8.3e-3, 20001)
    energy = np.trapezoid((80 * np.sin(np.pi * time / 8.3e-3)) ** 2, time)
    assert found.surge_A2s == pytest.approx(energy, rel=1e-6)
    printed = "surge_current_max_A = 80\nsurge_I2t_A2s = 20\nreverse_voltage_max_V"
    assert part(("reverse_voltage_max_V", printed)).surge_A2s == 20
    assert part().surge_A2s is None


def test_spread_is_mirrored_where_only_the_maximum_is_printed() -> None:
    """Common practice, no source: a part is as much better than typical as it may be worse."""
    model, zero = diode_model("D1", part()), np.zeros(1)
    least, typical, most = (
        float(model.sample(np.array([s]), zero, zero).forward_V(1.0, 25.0)[0]) for s in (-3, 0, 3)
    )
    assert most - typical == pytest.approx(typical - least, rel=0.02)
    assert most == pytest.approx(0.42, rel=0.02)


def test_too_few_points_are_said_in_words() -> None:
    lone = part(
        ("{ current_A = 0.1, typ_V = 0.26, max_V = 0.31 },", ""),
        ("{ current_A = 1, typ_V = 0.28, junction_C = 125 },", ""),
        (", max_V = 0.42", ""), (", max_V = 0.52", ""),
        ("{ reverse_V = 40, typ_A = 8e-3, junction_C = 125 },", ""),
    )  # fmt: skip
    notes = " / ".join(diode_model("D1", lone).notes)
    for words in (
        "ideality of 1.05 is assumed", "no hot forward point", "no maximum drop is printed",
        "leakage at one temperature only", "square root",
    ):  # fmt: skip
        assert words in notes


def test_points_that_no_junction_meets_are_remarked_upon() -> None:
    # From a tenth of an ampere on it bends the wrong way for a junction.
    notes = diode_model("D1", part(("typ_V = 0.36, max_V = 0.42", "typ_V = 0.44"))).notes
    assert any("no junction law passes through all its forward points" in n for n in notes)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (
            ("typ_V = 0.45, max_V = 0.52", "typ_V = 0.30"),
            "parts.D1.forward contradicts itself: 0.3 V at 3 A is not above 0.36 V at "
            "1 A; a junction's drop rises with current",
        ),
        (
            ("current_A = 3, typ_V = 0.45", "current_A = 1, typ_V = 0.45"),
            "parts.D1.forward has two points at 1 A and 25 C: give one, with typ_V and max_V in it",
        ),
        (
            ("typ_V = 0.28, junction_C", "typ_V = 0.95, junction_C"),
            "parts.D1.forward contradicts itself: 0.95 V at 1 A and 125 C does not fit "
            "its points at 25 C; the drop of a junction falls by 1 to 3 mV per kelvin at a small "
            "current",
        ),
        (
            ("typ_A = 8e-3", "typ_A = 8e-6"),
            "parts.D1.leakage contradicts itself: it falls or stays as the junction "
            "gets hotter, from 2e-05 A to 8e-06 A; leakage doubles every 8 to 15 K",
        ),
        (
            ("{ reverse_V = 40, typ_A = 8e-3, junction_C = 125 }", "{ reverse_V = 10, typ_A = 1 }"),
            "parts.D1.leakage contradicts itself: it falls as the reverse voltage "
            "rises; check that reverse_V and typ_A belong together",
        ),
    ],
)
def test_contradicting_points_are_named(change: tuple[str, str], message: str) -> None:
    with pytest.raises(InputError) as caught:
        diode_model("D1", part(change))
    assert str(caught.value) == message


def test_no_point_at_25_degrees() -> None:
    text = SCHOTTKY.replace(" },\n  { current_A = 1, typ_V = 0.28, junction_C = 125 }", " }")
    for point in ("max_V = 0.31", "max_V = 0.42", "max_V = 0.52"):
        text = text.replace(point, f"{point}, junction_C = 100")
    with pytest.raises(InputError, match="has no point at junction_C = 25: give at least one"):
        diode_model("D1", part((SCHOTTKY, text)))


def test_flatter_than_any_junction() -> None:
    change = (
        ("typ_V = 0.36, max_V = 0.42", "typ_V = 0.265"),
        ("typ_V = 0.45, max_V = 0.52", "typ_V = 0.27"),
    )
    with pytest.raises(InputError, match=r"no junction at 25 C can rise by less than 0\.087 V"):
        diode_model("D1", part(*change))
