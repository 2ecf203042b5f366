"""Where a load cannot draw its current, the circuit has no operating point and says so."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.circuit import GROUND, CurrentLoad, Emf, Junction, Resistor, network, solve
from benchkit.circuit.no_point import reason, without_point
from benchkit.parts.diode import DiodeLaw

LAW = DiodeLaw(1e-6, 1.05, 0.05, 0.69, 2.0)
DIODE = LAW.at(25.0)
LEAKY = replace(LAW, saturation_A=2e-9).at(25.0)


def test_a_load_that_is_cut_off_has_no_operating_point_and_says_so() -> None:
    """A diode the wrong way round carries its leakage and no more."""
    amps = np.array([1e-9, 3.0])
    circuit = network([
        Emf("battery", ("in", GROUND), 12.0, 0.1),
        Junction("D1", ("out", "in"), LEAKY),
        CurrentLoad("load", ("out", GROUND), amps),
    ])  # fmt: skip
    solution = solve(circuit, 2)
    assert solution.settled.tolist() == [True, False]
    assert without_point(circuit, solution).tolist() == [False, True]
    assert reason(circuit, solution, 0) is None
    words = reason(circuit, solution, 1)
    assert words is not None
    assert words.startswith("nothing carries the 3 A of load: it would have to drive them itself")


def test_a_load_below_zero_volts_is_named_though_the_equations_are_solved() -> None:
    """A megohm carries 3 mA at 3 kV: no load draws that from 12 V."""
    circuit = network([
        Emf("battery", ("in", GROUND), 12.0, 0.1), Resistor("R1", ("in", "out"), 1e6),
        CurrentLoad("load", ("out", GROUND), 3e-3),
    ])  # fmt: skip
    solution = solve(circuit, 1)
    assert solution.volts["out"] == pytest.approx([-2988.0], rel=1e-6)
    assert without_point(circuit, solution).all()
    assert "-2.99e+03 V across it" in str(reason(circuit, solution, 0))


def test_a_current_source_may_drive() -> None:
    circuit = network([
        CurrentLoad("I1", ("top", GROUND), -1.0), Junction("D1", ("top", GROUND), DIODE),
    ])  # fmt: skip
    solution = solve(circuit, 1)
    assert solution.settled.all()
    assert not without_point(circuit, solution).any()
    turned = network([
        CurrentLoad("I1", ("top", GROUND), -1.0), Junction("D1", (GROUND, "top"), DIODE),
    ])  # fmt: skip
    blocked = solve(turned, 1)
    assert not blocked.settled.any()
    assert str(reason(turned, blocked, 0)).startswith("nothing carries the 1 A that I1 drives")
