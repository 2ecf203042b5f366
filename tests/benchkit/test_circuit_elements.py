"""Every element: its slopes are the derivatives of its currents, and no current is lost in it."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.circuit import (
    Bipolar,
    Channel,
    CurrentLoad,
    Emf,
    FuseLink,
    Junction,
    LimitedSource,
    Resistor,
)
from benchkit.circuit.network import Element, terminal_currents
from benchkit.parts.bipolar import BipolarLaw
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.fuse import FuseLaw
from benchkit.parts.knee import KneeLaw
from benchkit.parts.mosfet import ChannelLaw

Floats = NDArray[np.float64]

DIODE = DiodeLaw(1e-6, 1.05, 0.05, 0.69, 2.0, leakage_A=2e-5, leakage_V=40.0)
ZENER = DiodeLaw(1e-12, 1.1, 0.5, 1.11, 3.0, knee=KneeLaw(2.4, 5e-3, 0.1, 8.0))
CHANNEL = ChannelLaw(24.0, 1.8, 0.0)
BIPOLAR = BipolarLaw(2e-14, 200.0, 3.0, 1.0, KneeLaw(2.5, 1e-5, 0.03, 20.0), 1e-9)
FUSE = FuseLaw(0.5, 1.3, 2.0, 1.0, 0.0)
ELEMENTS: list[Element] = [
    Resistor("R1", ("a", "b"), 47.0),
    Emf("E1", ("a", "b"), 1.5, 0.2),
    CurrentLoad("I1", ("a", "b"), 2.0),
    LimitedSource("V1", ("a", "b"), 12.0, 3.0),
    FuseLink("F1", ("a", "b"), FUSE.at(40.0)),
    Junction("D1", ("a", "b"), DIODE.at(60.0)),
    Junction("Z1", ("a", "b"), ZENER.at(60.0)),
    Channel("Q1", ("a", "b", "c"), CHANNEL.at(60.0), +1),
    Channel("Q2", ("a", "b", "c"), CHANNEL.at(60.0), -1),
    Bipolar("Q3", ("a", "b", "c"), BIPOLAR.at(60.0), +1),
    Bipolar("Q4", ("a", "b", "c"), BIPOLAR.at(60.0), -1),
]


def slopes_of(element: Element, volts: Floats) -> Floats:
    """d (current into terminal) / d (voltage of terminal), shape (terminals, terminals, batch)."""
    count = len(element.nodes)
    slopes = np.zeros((count, count, volts.shape[1]))
    for branch in element.branches(volts):
        for plus, minus, slope in branch.slopes:
            for terminal, sign in ((branch.first, 1), (branch.second, -1)):
                slopes[terminal, plus] += sign * slope
                slopes[terminal, minus] -= sign * slope
    return slopes


def into(element: Element, volts: Floats) -> Floats:
    return np.stack(terminal_currents(element, dict(zip(element.nodes, volts, strict=True))))


@pytest.mark.parametrize("element", ELEMENTS, ids=lambda e: e.name)
def test_slopes_are_derivatives_and_currents_sum_to_zero(element: Element) -> None:
    volts = np.random.default_rng(7).uniform(-3, 3, (len(element.nodes), 200))
    if element.name == "V1":  # so near its corners that they are seen
        volts[0] = 12.0 + volts[1] - np.linspace(-0.01, 0.03, 200)
    slopes = slopes_of(element, volts)
    currents = into(element, volts)
    assert currents.sum(axis=0) == pytest.approx(np.zeros(200), abs=1e-12 * np.abs(currents).max())
    step = 1e-7
    size = np.abs(slopes).max(axis=(0, 1)) + 1e-3
    for terminal in range(len(volts)):
        shift = np.zeros_like(volts)
        shift[terminal] = step
        up, down = into(element, volts + shift), into(element, volts - shift)
        assert np.abs((up - down) / (2 * step) - slopes[:, terminal]).max() < 1e-4 * size.max()


def test_limited_source_delivers_between_nothing_and_its_limit() -> None:
    source = LimitedSource("V1", ("a", "b"), 12.0, 3.0)
    volts = np.array([[0.0, 11.99, 11.995, 12.5, 30.0], [0.0] * 5])
    delivered = -source.branches(volts)[0].amps
    assert delivered[0] == pytest.approx(3.0, rel=1e-12)
    assert delivered[1] == pytest.approx(2.0, rel=1e-6)  # 10 mV over 5 mohm
    assert delivered[2] == pytest.approx(1.0, rel=1e-6)
    assert np.all(delivered[3:] < 1e-6)


def test_a_small_limit_keeps_its_precision_far_beyond_the_corner() -> None:
    """400 V over 5 milliohms would be 80 kA: as a difference of softplus functions of it, a limit
    of 1 mA would be known to 1e-8 only."""
    source = LimitedSource("V1", ("a", "b"), 400.0, 1e-3)
    delivered = -source.branches(np.array([[0.0, 200.0], [0.0, 0.0]]))[0].amps
    assert delivered == pytest.approx([1e-3, 1e-3], rel=1e-15)


def test_slopes_keep_their_precision_far_below_threshold() -> None:
    """In the tail I grows by e per n Vt, so slope over current is known: a slope that underflows
    to zero long before its current does would leave a solver without a direction."""
    amps, by_gate, _ = CHANNEL.at(25.0).current(np.array([-2.0]), np.array([1.0]))
    assert amps[0] > 0
    assert by_gate[0] * 1.2 * 0.0256926 / amps[0] == pytest.approx(1.0, rel=1e-3)
