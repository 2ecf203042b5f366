"""Operating points against ngspice, a circuit simulator that nobody here wrote, on decks written
by hand from the formulas of the published laws."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest

from benchkit.circuit import GROUND, Channel, CurrentLoad, Junction, Resistor, network, solve
from benchkit.parts.diode import DiodeLaw, thermal_voltage
from benchkit.parts.mosfet import ChannelLaw

DIODE = DiodeLaw(3e-6, 1.08, 0.031, 0.69, 2.0)
BODY = DiodeLaw(2e-12, 1.1, 0.015, 1.11, 3.0)
CHANNEL = ChannelLaw(23.8, 1.85, 0.0138, 1.4)
OPTIONS = ".options reltol=1e-9 abstol=1e-15 vntol=1e-12 gmin=1e-15 tnom=25"


def found_ngspice() -> str:
    program = shutil.which("ngspice")
    if program is None:
        if os.environ.get("CI"):
            pytest.fail("ngspice is missing: apt-get install ngspice")
        pytest.skip("ngspice is not installed on this machine")
    return program


@pytest.fixture
def ngspice() -> str:
    return found_ngspice()


def test_a_missing_ngspice_fails_where_it_must_be_there(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(shutil, "which", lambda _: None)
    monkeypatch.setenv("CI", "true")
    with pytest.raises(pytest.fail.Exception, match="ngspice is missing"):
        found_ngspice()
    monkeypatch.delenv("CI")
    with pytest.raises(pytest.skip.Exception):
        found_ngspice()


def operating_point(program: str, folder: Path, deck: str, node: str) -> float:
    path = folder / "deck.cir"
    path.write_text(
        f"* hand-written\n{deck}\n{OPTIONS}\n.control\nset numdgt=12\nop\nprint v({node})\n"
        "quit 0\n.endc\n.end\n",
        encoding="ascii",
    )
    done = subprocess.run(
        [program, "-b", str(path)], capture_output=True, text=True, timeout=60, check=True
    )
    found = re.search(rf"v\({node}\) = (\S+)", done.stdout)
    assert found, done.stdout + done.stderr
    return float(found.group(1))


def diode_model(name: str, law: DiodeLaw) -> str:
    return (
        f".model {name} D(IS={law.saturation_A} N={law.ideality} RS={law.series_ohm} "
        f"EG={law.bandgap_V} XTI={law.exponent})"
    )


@pytest.mark.parametrize("temp", [25.0, 85.0, 125.0])
@pytest.mark.parametrize("amps", [1e-3, 0.5, 3.0])
def test_series_diode(ngspice: str, tmp_path: Path, amps: float, temp: float) -> None:
    deck = f"V1 in 0 12\nD1 in out dx\nI1 out 0 {amps}\n{diode_model('dx', DIODE)}\n.temp {temp}"
    theirs = 12 - operating_point(ngspice, tmp_path, deck, "out")
    circuit = network([
        Junction("D1", ("in", "out"), DIODE.at(temp)), CurrentLoad("I1", ("out", GROUND), amps),
    ], held={"in": 12.0})  # fmt: skip
    ours = 12 - solve(circuit, 1).volts["out"][0]
    assert ours == pytest.approx(theirs, rel=3e-5)


@pytest.mark.parametrize("temp", [25.0, 100.0])
@pytest.mark.parametrize(("supply", "amps"), [(12.0, 3.0), (5.0, 1.0), (2.2, 0.2), (1.0, 0.5)])
def test_pmos_pass(ngspice: str, tmp_path: Path, supply: float, amps: float, temp: float) -> None:
    vt, ratio = float(thermal_voltage(temp)), (temp + 273.15) / 298.15
    unit = 2 * 1.2 * 23.8 * ratio**-1.4 * vt**2
    threshold = 1.85 - 0.002 * (temp - 25)
    forward = f"(v(out)-v(gate)-{threshold})/{2 * 1.2 * vt}"
    backward = f"({forward}-(v(out)-v(inside))/{2 * vt})"
    square = "ln(1+exp({0}))*ln(1+exp({0}))".format
    deck = f"""V1 in 0 {supply}
R1 in inside {0.0138 * ratio**1.4}
B1 out inside I={unit}*({square(forward)}-{square(backward)})
D1 in out body
R2 gate 0 100
I1 out 0 {amps}
{diode_model("body", BODY)}
.temp {temp}
.nodeset v(out)={supply - 0.5}"""
    theirs = supply - operating_point(ngspice, tmp_path, deck, "out")
    circuit = network([
        Resistor("R1", ("in", "inside"), CHANNEL.series(temp)),
        Channel("Q1", ("inside", "gate", "out"), CHANNEL.at(temp), -1),
        Junction("D1", ("in", "out"), BODY.at(temp)),
        Resistor("R2", ("gate", GROUND), 100.0),
        CurrentLoad("I1", ("out", GROUND), amps),
    ], held={"in": supply})  # fmt: skip
    solution = solve(circuit, 1, start={"out": supply - 0.5})
    assert np.all(solution.settled)
    assert supply - solution.volts["out"][0] == pytest.approx(theirs, rel=1e-4)
