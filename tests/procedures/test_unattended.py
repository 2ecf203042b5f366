"""Runs without a person: relays move the leads, the loop is watched, and what they get wrong is
found by measurement."""

from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.errors import InputError, LinkError, Refused, Tripped
from benchkit.records.record import read_record
from procedures.commands import opened
from procedures.inputs import read_board
from procedures.screen import Screen
from procedures.unattended import check_unattended
from procedures.verify import Done, run_board
from tests.benchkit.nine_stages import text
from tests.simulated_bench import GOOD, failure, workshop

QUIET = Screen(quiet=True)
SWITCH = """
[instruments.switch]
kind = "switch"
resource = "simulated"
dialect = "switch-plain"
identity = "Oddenfell,SW-20"
calibration_due = 2027-09-30

"""
WIRING = """
[wiring]
instrument = "switch"
loop = "1"
straight = "301"
crossed = "302"
bleeder = "303"
"""
STAGE = (
    text("pmos-pass") + "[reverse]\nsteps = 2\ndwell_s = 1.0\n"
    "[limits]\ndrop = [{ current_A = 2.0, max_V = 0.08 }]\nguarded_reverse_max_V = 0.3\n"
)


def shop(folder: Path, wiring: str = WIRING, *faults: str) -> Path:
    """A workshop with relays and a loop."""
    workshop(folder, trial=True, supply="supply-select", faults=faults)
    bench = (folder / "bench.toml").read_text("utf-8")
    bench = bench.replace("[instruments.load]", f"{SWITCH}{wiring}\n[instruments.load]", 1)
    (folder / "bench.toml").write_text(bench, "utf-8")
    (folder / "mine.toml").write_text(STAGE, "utf-8")
    return folder


def unattended(folder: Path) -> tuple[Done, dict[str, float]]:
    """One run with nobody there, and what the plant knows of it."""
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    with opened(inputs, QUIET, unattended=True) as bench:
        done = run_board(bench, inputs.job, GOOD, folder / "run", QUIET)
        assert bench.control is not None
        truth = {
            name: float(bench.control.ask(f':SIM:TRUT? "{name}"'))
            for name in ("hot_rewirings", "relay_shorts", "supply_voltage")
        }
    return done, truth


def test_relays_do_a_whole_run(tmp_path: Path) -> None:
    folder = shop(tmp_path / "w")
    done, truth = unattended(folder)
    assert done.error is None
    assert done.evaluation.result.verdict == "pass", done.evaluation.result.why
    assert (truth["hot_rewirings"], truth["relay_shorts"]) == (0, 0)
    assert truth["supply_voltage"] < 0.5
    traffic = (done.folder / "traffic.log").read_text("utf-8")
    assert traffic.count(":ROUT:CLOS (@302)") == 1
    assert read_record(done.folder).said("caution")


def test_a_loop_that_is_open_refuses(tmp_path: Path) -> None:
    done, _ = unattended(shop(tmp_path / "w", WIRING, "loop-open@0"))
    error = failure(done)
    assert isinstance(error, Refused)
    assert "interlock loop is open" in str(error)
    assert "input 1 of switch" in str(error)
    assert not read_record(done.folder).said("on")


def test_a_loop_that_opens_ends_the_step(tmp_path: Path) -> None:
    done, truth = unattended(shop(tmp_path / "w", WIRING, "loop-open@3.0"))
    error = failure(done)
    assert isinstance(error, Tripped)
    assert "the interlock loop is open (input 1 of switch)" in str(error)
    assert truth["supply_voltage"] < 0.5
    assert done.evaluation.result.verdict == "undecided"


def test_a_relay_that_sticks_stops_the_run(tmp_path: Path) -> None:
    done, truth = unattended(shop(tmp_path / "w", WIRING, "relay-stuck:switch=302@0"))
    error = failure(done)
    assert isinstance(error, LinkError)
    assert "302" in str(error)
    assert truth["hot_rewirings"] == 0
    assert done.evaluation.result.verdict != "pass"


def test_a_relay_that_lies_is_found_by_measurement(tmp_path: Path) -> None:
    """Its read-back says crossed, its contact stays open: the proof of polarity sees nothing."""
    done, _ = unattended(shop(tmp_path / "w", WIRING, "relay-lying:switch=302@0"))
    error = failure(done)
    assert isinstance(error, Refused)
    assert "exposed_voltage reads" in str(error)
    assert not [s for s in read_record(done.folder).steps("reverse/") if "dwell" in s]


@pytest.mark.parametrize(
    ("wiring", "words"),
    [
        ("", r"needs an interlock loop \(wiring.loop\) and a polarity relay"),
        (WIRING.replace('loop = "1"\n', ""), r"needs an interlock loop \(wiring.loop\): without"),
        (WIRING.replace('straight = "301"\ncrossed = "302"\n', ""), "needs a polarity relay"),
        (WIRING.replace('bleeder = "303"\n', ""), "put a resistor of 1000 ohm across"),
    ],
)
def test_what_a_bench_cannot_do_alone_is_bad_input(wiring: str, words: str, tmp_path: Path) -> None:
    folder = shop(tmp_path / "w", wiring)
    inputs = read_board(folder / "mine.toml", folder / "bench.toml")
    with pytest.raises(InputError, match=words):
        check_unattended(inputs)
