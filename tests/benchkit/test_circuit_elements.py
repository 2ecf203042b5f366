"""Every element: its slopes are the derivatives of its currents, and no current is lost in it."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.circuit import Channel, CurrentLoad, Junction, LimitedSource, Resistor
from benchkit.circuit.network import Element
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.mosfet import ChannelLaw

DIODE = DiodeLaw(1e-6, 1.05, 0.05, 0.69, 2.0, leakage_A=2e-5, leakage_V=40.0)
CHANNEL = ChannelLaw(24.0, 1.8, 0.0)
ELEMENTS: list[Element] = [
    Resistor("R1", ("a", "b"), 47.0),
    CurrentLoad("I1", ("a", "b"), 2.0),
    LimitedSource("V1", ("a", "b"), 12.0, 3.0),
    Junction("D1", ("a", "b"), DIODE, 60.0),
    Channel("Q1", ("a", "b", "c"), CHANNEL, 60.0, +1),
    Channel("Q2", ("a", "b", "c"), CHANNEL, 60.0, -1),
]


@pytest.mark.parametrize("element", ELEMENTS, ids=lambda e: e.name)
def test_slopes_are_derivatives_and_currents_sum_to_zero(element: Element) -> None:
    volts = np.random.default_rng(7).uniform(-3, 3, (200, len(element.nodes)))
    if element.name == "V1":  # so near its corners that they are seen
        volts[:, 0] = 12.0 + volts[:, 1] - np.linspace(-0.01, 0.03, 200)
    currents, slopes = element.currents(volts)
    assert currents.sum(axis=1) == pytest.approx(np.zeros(200), abs=1e-12)
    step = 1e-7
    for terminal in range(volts.shape[1]):
        shift = np.zeros_like(volts)
        shift[:, terminal] = step
        up, down = element.currents(volts + shift)[0], element.currents(volts - shift)[0]
        size = np.abs(slopes).max(axis=(1, 2))[:, None] + 1e-3
        assert np.abs((up - down) / (2 * step) - slopes[:, :, terminal]).max() < 1e-4 * size.max()


def test_limited_source_delivers_between_nothing_and_its_limit() -> None:
    source = LimitedSource("V1", ("a", "b"), 12.0, 3.0)
    volts = np.array([[0.0, 0.0], [11.99, 0.0], [11.995, 0.0], [12.5, 0.0], [30.0, 0.0]])
    delivered = -source.currents(volts)[0][:, 0]
    assert delivered[0] == pytest.approx(3.0, rel=1e-12)
    assert delivered[1] == pytest.approx(2.0, rel=1e-6)  # 10 mV over 5 mohm
    assert delivered[2] == pytest.approx(1.0, rel=1e-6)
    assert np.all(delivered[3:] < 1e-6)


def test_slopes_keep_their_precision_far_below_threshold() -> None:
    """In the tail I grows by e per n Vt, so slope over current is known: a slope that underflows
    to zero long before its current does would leave a solver without a direction."""
    amps, by_gate, _ = CHANNEL.current(np.array([-2.0]), np.array([1.0]), 25.0)
    assert amps[0] > 0
    assert by_gate[0] * 1.2 * 0.0256926 / amps[0] == pytest.approx(1.0, rel=1e-3)
