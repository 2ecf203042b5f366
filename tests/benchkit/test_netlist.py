"""The deck as text: names that every SPICE reads, and what it says of itself."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

import pytest

from benchkit.circuit import CurrentLoad, Junction, Resistor, network, solve
from benchkit.errors import InputError
from benchkit.netlist import deck
from benchkit.parts.diode import DiodeLaw
from benchkit.prediction.decks import scenario_deck
from tests.benchkit.nine_stages import made
from tests.benchkit.spice import operating_points
from tests.benchkit.test_circuit_ngspice import found_ngspice
from tests.procedures.test_cli import run


def test_a_stranger_s_plain_spice_prints_the_voltages(tmp_path: Path) -> None:
    program = found_ngspice()
    path = tmp_path / "deck.cir"
    path.write_text(scenario_deck(made("pmos-pass-zener"), "right-way"), encoding="ascii")
    done = subprocess.run(
        [program, "-b", str(path)], capture_output=True, text=True, timeout=60, check=False
    )
    assert done.returncode == 0
    printed = re.search(r"^\s*guarded_plus\s+(\S+)", done.stdout, re.M)
    assert printed
    assert float(printed[1]) == pytest.approx(14.94, abs=0.02)


def test_it_says_what_it_is_and_no_figure_has_absurd_digits() -> None:
    text = scenario_deck(made("pmos-sensed"), "reversed-battery-on", 40.0)
    head = "\n".join(line for line in text.splitlines() if line.startswith("*"))
    for said in (
        "Buoy charger, pmos-sensed: reversed-battery-on", "topology pmos-sensed", "15 V the wrong",
        "set to 12 V and 3 A", "40 C", "equipment.off_ohm = 1000 ohm", "operating point",
        "node guarded_plus is guarded+", "exposed- and guarded- are node 0", "* Q2, npn",
    ):  # fmt: skip
        assert said in head
    for reference in ("R1", "R2", "D1", "Q2", "BQ1", "RQ1_series", "DQ1_body"):
        assert len(re.findall(rf"^{reference} ", text, re.M)) == 1
    assert not re.search(r"\d{8}|\.\d{11}", text)
    assert text.isascii()


def test_awkward_names_stay_apart(tmp_path: Path) -> None:
    """gnd is another name of node 0 to most SPICEs, and capitals make no difference to any."""
    law = DiodeLaw(1e-12, 1.0, 0.1, 1.11, 3.0)
    circuit = network([
        CurrentLoad("I1", ("0", "gnd"), 0.001), Resistor("R1", ("gnd", "0"), 1000.0),
        Resistor("r1", ("gnd", "GND"), 1000.0), Junction("D.1", ("GND", "0"), law.at(25.0)),
        Junction("D_1", ("g+d", "0"), law.at(25.0)), Resistor("1", ("gnd", "g+d"), 2000.0),
        Resistor("2", ("gnd", "g_plusd"), 10.0),
    ])  # fmt: skip
    solution = solve(circuit, 1)
    text = deck(circuit, solution.volts, "names Ω", ["two\nlines"])
    said = dict(reversed(pair) for pair in re.findall(r"^\* node (\S+) is (\S+)$", text, re.M))
    found = operating_points(found_ngspice(), tmp_path, {"names": text})["names"]
    for node in ("gnd", "GND", "g+d", "g_plusd"):
        plain = said.get(node, node)
        assert found[plain] == pytest.approx(float(solution.volts[node][0]), abs=1e-5), node


@pytest.mark.parametrize(("name", "warm"), [("sideways", 25.0), ("open", 400.0), ("open", None)])
def test_what_cannot_be_written_is_refused(name: str, warm: float | None) -> None:
    ambient = float("nan") if warm is None else warm
    with pytest.raises(InputError, match="must be"):
        scenario_deck(made("clamp"), name, ambient)


def test_command_prints_and_writes_the_same(tmp_path: Path) -> None:
    assert run("new", "mine", cwd=tmp_path)[0] == 0
    order = ("netlist", "mine/stage-network.toml", "--scenario", "reversed-source")
    code, printed, _ = run(*order, cwd=tmp_path)
    assert code == 0
    assert printed.endswith(".op\n.end\n")
    code, nothing, _ = run(*order, "--out", "deck.cir", cwd=tmp_path)
    assert (code, nothing) == (0, "")
    assert (tmp_path / "deck.cir").read_text(encoding="ascii") == printed
    _, warm, _ = run(*order, "--ambient", "50", cwd=tmp_path)
    assert "every part is at 50 C" in warm
    bad = {
        "scenario is 'up'": ("mine/stage-network.toml", "--scenario", "up"),
        "there is no such file": ("none.toml", "--scenario", "open"),
        "ambient is 999 C": (*order[1:], "--ambient", "999"),
        "--out is": (*order[1:], "--out", "nowhere/deck.cir"),
    }
    for sentence, arguments in bad.items():
        code, printed, err = run("netlist", *arguments, cwd=tmp_path)
        assert (code, printed) == (2, "")
        assert sentence in err
        assert len(err.splitlines()) == 1
