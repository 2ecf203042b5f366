"""The channel law against the limits of its published model, and its fit to a sheet's points."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchkit.errors import InputError
from benchkit.files.parts import NMosfet, PMosfet
from benchkit.parts.diode import thermal_voltage
from benchkit.parts.mosfet import SLOPE_FACTOR, ChannelLaw, MosfetModel, mosfet_model
from tests.benchkit.example_stages import PMOS, stage_file

LAW = ChannelLaw(24.0, 1.8, 0.0)


def part(*changes: tuple[str, str]) -> PMosfet:
    found = stage_file(PMOS, *changes).parts["Q1"]
    assert isinstance(found, PMosfet)
    return found


def model(*changes: tuple[str, str]) -> MosfetModel:
    return mosfet_model("Q1", part(*changes))


@pytest.mark.parametrize("gate_V", [5.0, 10.0, 15.0])
def test_strong_inversion_is_a_resistor(gate_V: float) -> None:
    """Enz, Krummenacher and Vittoz 1995, strong inversion at a small drain voltage:
    1 / (beta (Vgs - VT))."""
    amps, _, slope = LAW.at(25.0).current(np.array([gate_V]), np.array([1e-4]))
    expected = 24.0 * (gate_V - 1.8)
    assert amps[0] / 1e-4 == pytest.approx(expected, rel=1e-3)
    assert slope[0] == pytest.approx(expected, rel=1e-3)


def test_strong_inversion_saturates_at_the_square_law() -> None:
    """The same source: beta (Vgs - VT)^2 / 2n."""
    amps = LAW.at(25.0).current(np.array([5.0]), np.array([20.0]))[0][0]
    assert amps == pytest.approx(24.0 * 3.2**2 / (2 * SLOPE_FACTOR), rel=1e-6)


def test_subthreshold_slope() -> None:
    """The same source, weak inversion: a decade of current for n Vt ln 10 of gate voltage."""
    gate = np.array([0.9, 0.9 + SLOPE_FACTOR * float(thermal_voltage(25.0)) * np.log(10)])
    amps = LAW.at(25.0).current(gate, np.array([1.0, 1.0]))[0]
    assert amps[1] / amps[0] == pytest.approx(10.0, rel=1e-3)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(st.floats(-5, 5), st.floats(-5, 5), st.floats(0, 15), st.floats(-40, 200))
def test_drain_and_source_may_be_swapped(
    drain: float, source: float, gate: float, junction_C: float
) -> None:
    """The same source: the model is symmetric when voltages are taken from the body. Here the body
    is the source, so the gate is shifted by what the other terminal makes of the pinch-off."""
    vt = float(thermal_voltage(junction_C))
    across = drain - source
    one = LAW.at(junction_C).current(np.array([gate]), np.array([across]))[0][0]
    threshold = 1.8 - 0.002 * (junction_C - 25)
    pinched = (gate - threshold) / SLOPE_FACTOR - across
    swapped = pinched * SLOPE_FACTOR + threshold
    other = LAW.at(junction_C).current(np.array([swapped]), np.array([-across]))[0][0]
    scale = 2 * SLOPE_FACTOR * 24 * ((junction_C + 273.15) / 298.15) ** -LAW.exponent * vt**2
    assert one == pytest.approx(-other, rel=1e-9, abs=1e-9 * scale)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(st.floats(0, 15), st.floats(-10, 30), st.floats(1e-3, 5), st.floats(-40, 200))
def test_current_rises_with_drain_voltage(
    gate: float, drain: float, step: float, junction_C: float
) -> None:
    amps = LAW.at(junction_C).current(np.full(2, gate), np.array([drain, drain + step]))[0]
    assert amps[1] >= amps[0]


@settings(derandomize=True, deadline=None, max_examples=150)
@given(st.floats(-1000, 1000), st.floats(-1000, 1000), st.floats(-80, 200))
def test_slopes_are_the_derivatives_wherever_it_works(
    gate: float, drain: float, junction_C: float
) -> None:
    """Against the derivative of the published formula, written out for each tail."""
    vt = float(thermal_voltage(junction_C))
    ratio = (junction_C + 273.15) / 298.15
    unit = 2 * SLOPE_FACTOR * 24 * ratio**-LAW.exponent * vt**2
    forward = (gate - 1.8 + 0.002 * (junction_C - 25)) / (2 * SLOPE_FACTOR * vt)
    backward = forward - drain / (2 * vt)
    parts = []
    for x in (forward, backward):
        charge = x if x > 40 else math.exp(x) if x < -40 else math.log1p(math.exp(x))
        share = 1.0 if x > 40 else math.exp(x) if x < -40 else 1 / (1 + math.exp(-x))
        parts.append((charge, 2 * charge * share / (2 * vt)))
    (f, f_slope), (r, r_slope) = parts
    amps, by_gate, by_drain = (
        float(x[0]) for x in LAW.at(junction_C).current(np.array([gate]), np.array([drain]))
    )
    noise = unit * 1e-14 * max(f, r)  # what the difference of the two charges leaves
    assert amps == pytest.approx(unit * (f * f - r * r), rel=1e-9, abs=noise * max(f, r))
    assert by_gate == pytest.approx(
        unit * (f_slope - r_slope) / SLOPE_FACTOR, rel=1e-9, abs=noise / vt
    )
    assert by_drain == pytest.approx(unit * r_slope, rel=1e-9, abs=0)


def test_slopes_keep_their_precision_far_below_threshold() -> None:
    """In the tail I grows by e per n Vt, so slope over current is known: a slope that underflows
    to zero long before its current does would leave a solver without a direction."""
    amps, by_gate, _ = LAW.at(25.0).current(np.array([-15.0]), np.array([1.0]))
    assert amps[0] > 0
    vt = float(thermal_voltage(25.0))
    assert by_gate[0] * SLOPE_FACTOR * vt / amps[0] == pytest.approx(1.0, rel=1e-9)


def test_n_channel_is_read_as_p_channel_is() -> None:
    """Magnitudes both: the same numbers make the same law."""
    change = (
        ('kind = "p-mosfet"', 'kind = "n-mosfet"'),
        ('topology = "pmos-pass"', 'topology = "nmos-pass"'),
    )
    found = stage_file(PMOS, *change).parts["Q1"]
    assert isinstance(found, NMosfet)
    assert mosfet_model("Q1", found) == model()


def test_gate_rating_the_other_way() -> None:
    assert part().gate_reverse_max_V == 20
    less = ("gate_source_max_V = 20", "gate_source_max_V = 20\ngate_source_reverse_max_V = 12")
    assert part(less).gate_reverse_max_V == 12


def test_leakage_of_the_off_channel_goes_into_the_body_diode() -> None:
    leak = (
        "drain_source_max_V",
        "leakage = [{ reverse_V = 24, typ_A = 1e-7, max_A = 1e-6 }]\ndrain_source_max_V",
    )
    found = model(leak)
    for score, amps in ((0.0, 1e-7), (3.0, 1e-6)):
        drawn = found.sample(np.zeros(1), np.zeros(1), np.array([score])).at(25.0)
        assert -drawn.body.current(np.array([-24.0]))[0][0] == pytest.approx(amps, rel=1e-6)
    assert any("leakage at one temperature only" in note for note in found.notes)
    assert not any("leak" in note for note in model().notes)


def test_bound_laws_are_the_channel_the_series_resistance_and_the_body() -> None:
    found = model().sample(np.zeros(2), np.zeros(2), np.zeros(2))
    warm = np.array([25.0, 125.0])
    bound = found.at(warm)
    assert bound.series_ohm == pytest.approx(found.channel.series(warm))
    amps = np.array([5.0, 5.0])
    drop = found.body.forward_V(amps, warm)
    assert bound.body.current(drop)[0] == pytest.approx(amps, rel=1e-9)
    assert drop[0] == pytest.approx(0.85, rel=0.002)  # as printed


def test_printed_resistances_are_reproduced() -> None:
    typical = model().typical
    for point in part().on_resistance:
        ohms = float(typical.on_resistance(point.gate_V, point.current_A, point.junction_C))
        assert ohms == pytest.approx(point.typ_ohm, rel=0.005)


def test_printed_threshold_is_reproduced() -> None:
    """At the current it is printed for, drain tied to gate as sheets have it."""
    amps = model().typical.at(25.0).current(np.array([1.7]), np.array([1.7]))[0][0]
    assert amps == pytest.approx(250e-6, rel=0.01)


def test_limits_of_the_spread() -> None:
    found = model()
    zero = np.zeros(1)
    most = found.sample(np.array([3.0]), zero, zero).channel.on_resistance(10.0, 5.0)[0]
    least = found.sample(np.array([-3.0]), zero, zero).channel.on_resistance(10.0, 5.0)[0]
    ratio = 0.040 / 0.030
    assert most == pytest.approx(0.019 * ratio, rel=0.01)
    assert least == pytest.approx(0.019 / ratio, rel=0.01)
    for score, volts in ((-3.0, 1.0), (3.0, 2.5)):
        law = found.sample(zero, np.array([score]), zero).channel.at(25.0)
        amps = law.current(np.array([volts]), np.array([volts]))[0][0]
        assert amps == pytest.approx(250e-6, rel=0.01)


def test_a_sheet_whose_channel_is_nearly_all_of_its_resistance() -> None:
    """No series resistance to speak of and a small rise: still one exponent that meets it."""
    found = model(
        ("gate_V = 4.5, current_A = 5, typ_ohm = 0.030, max_ohm = 0.040",
         "gate_V = 4.5, current_A = 5, typ_ohm = 0.055"),
        ("typ_ohm = 0.028, junction", "typ_ohm = 0.0255, junction"),
    )  # fmt: skip
    assert float(found.typical.on_resistance(10.0, 5.0, 125.0)) == pytest.approx(0.0255, rel=0.005)
    assert 0.3 < found.typical.exponent < 2.0


def test_what_is_missing_is_said_in_words() -> None:
    found = model(
        ("  { gate_V = 10, current_A = 5, typ_ohm = 0.028, junction_C = 125 },\n", ""),
        (", max_ohm = 0.040", ""), (", max_ohm = 0.025", ""),
    )  # fmt: skip
    notes = " / ".join(found.notes)
    assert "no hot on-resistance is given" in notes
    assert "no maximum on-resistance is printed" in notes
    assert "one forward point only" in notes
    hot = found.typical.on_resistance(10.0, 5.0, 125.0) / found.typical.on_resistance(10.0, 5.0)
    assert float(hot) == pytest.approx(1.6, abs=0.1)  # common practice, no source


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (
            ("typ_ohm = 0.019, max_ohm = 0.025", "typ_ohm = 0.031"),
            "parts.Q1.on_resistance contradicts itself: 0.031 ohm at 10 V is not below "
            "0.03 ohm at 4.5 V; a channel's resistance falls with gate voltage",
        ),
        (
            ("gate_V = 4.5", "gate_V = 1.5"),
            "parts.Q1.on_resistance has a point at gate_V 1.5, not above the threshold "
            "of 1.7 V: on-resistance is printed for a gate that is driven",
        ),
        (
            ("typ_ohm = 0.030, max_ohm = 0.040", "typ_ohm = 0.30"),
            "parts.Q1.on_resistance contradicts parts.Q1.threshold: between 4.5 V and "
            "10 V the resistance falls further than a channel with a threshold of 1.7 V can; check "
            "the points, or give the typical threshold",
        ),
        (
            ("typ_ohm = 0.028, junction", "typ_ohm = 0.018, junction"),
            "parts.Q1.on_resistance contradicts itself: 0.018 ohm at 125 C does not "
            "fit 0.019 ohm at 25 C; a channel's resistance rises with temperature, mostly by a "
            "factor of 1.3 to 1.9 at 125 C",
        ),
        (
            ("gate_V = 10, current_A = 5, typ_ohm = 0.019",
             "gate_V = 4.5, current_A = 5, typ_ohm = 0.019"),
            "parts.Q1.on_resistance needs points at two gate voltages or more at "
            "junction_C = 25",
        ),
    ],
)  # fmt: skip
def test_contradicting_points_are_named(change: tuple[str, str], message: str) -> None:
    with pytest.raises(InputError) as caught:
        model(change)
    assert str(caught.value) == message
