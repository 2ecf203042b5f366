"""Short version of the campaign ``kills``, and what its account of readings would find."""

from dataclasses import asdict, replace
from importlib.resources import files
from pathlib import Path

import pytest

from benchkit.files import BenchFile, load
from benchkit.reading import Reading
from tests.campaigns.kill_witness import PROOF, Levels, Said, account, limits_missing
from tests.campaigns.kills import MUST_BE_0, Extent, campaign

OF_A_RUN = Extent(messages=400, while_on=180, seconds=2.5)
"""Somewhat less than a whole run is, so that nearly every kill comes before its end."""


def test_a_few_kills_lose_nothing() -> None:
    found = campaign(2, seed=8, extent=OF_A_RUN)
    assert found["kills"] == 2
    assert {key: found[key] for key in MUST_BE_0} == dict.fromkeys(MUST_BE_0, 0)
    assert found["told"] == found["found_on"]
    for key in ("readings", "switched_on", "found_on", "locks_held"):
        number = found[key]
        assert isinstance(number, int)
        assert number > 0, key


def said(text: str, answer: str, *, on: bool = False, aside: bool = False) -> Said:
    device = "supply" if "OUTP" in text else "thermometer" if "TEMP" in text else "meter"
    return Said(device, text, answer, on, False, aside)


PUT_IN = Said(
    "control", ':SIM:INS "B-1","stage.toml";:SYST:ERR?', '0,"No error"', False, False, False
)
CASE = said(":MEAS:TEMP? (@201);:SYST:ERR?", '24.1234;0,"No error"')
DROP = said(":READ? (@101);:SYST:ERR?", '1.5E-02;0,"No error"')
AMPS = said(":READ? (@104);:SYST:ERR?", '3.0E-02;0,"No error"')
STATE = said(":OUTP?;:MEAS:VOLT?;:MEAS:CURR?;:SYST:ERR?", '1;12.001;3.002;0,"No error"', on=True)
OVER = said(":READ? (@101);:SYST:ERR?", '9.9E37;0,"No error"')
ENDED = said(":SYST:ERR?", '0,"No error"')


def read(point: str, value: float) -> Reading:
    return Reading(0.0, point, value, "V", 0.0, 0.0)


ROWS = [
    read("case", 24.1234),
    read("drop", 0.015),
    read("exposed_current", 0.03 / 0.01),
    read("supply_voltage", 12.001),
    read("supply_current", 3.002),
    read("drop", float("nan")),
]
LOG = [PUT_IN, CASE, DROP, AMPS, STATE, OVER, ENDED]


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> BenchFile:
    path: Path = tmp_path_factory.mktemp("bench") / "bench.toml"
    path.write_bytes(files("benchkit.files.starters").joinpath("bench.toml").read_bytes())
    return load(BenchFile, path)


def test_a_whole_record_is_whole(bench: BenchFile) -> None:
    found = account(LOG, ROWS, bench)
    assert (found.used, found.lost, found.unexplained) == (6, (), 0)


@pytest.mark.parametrize("missing", range(len(ROWS)))
def test_every_reading_that_is_missing_is_found(bench: BenchFile, missing: int) -> None:
    found = account(LOG, ROWS[:missing] + ROWS[missing + 1 :], bench)
    assert len(found.lost) == 1
    assert found.lost[0].startswith(ROWS[missing].point)


def test_the_last_answer_may_be_missing_and_those_before_the_board_or_aside(
    bench: BenchFile,
) -> None:
    assert not account(LOG[:-1], ROWS[:-1], bench).lost
    assert not account([DROP, CASE, PUT_IN, ENDED], [], bench).lost
    assert not account([PUT_IN, replace(DROP, aside=True), ENDED], [], bench).lost
    assert account([PUT_IN, DROP, ENDED], [], bench).lost


def test_a_reading_that_nobody_gave_is_found(bench: BenchFile) -> None:
    assert account(LOG, [*ROWS, read("drop", 0.016)], bench).unexplained == 1


@pytest.mark.parametrize("level", ["current_limit_A", "over_voltage_V", "over_current_A"])
@pytest.mark.parametrize("is_", [None, 38.4])
def test_a_level_that_was_not_set_is_found(level: str, is_: float | None) -> None:
    assert not limits_missing(PROOF, [PROOF])
    assert limits_missing(Levels(**(asdict(PROOF) | {level: is_})), [PROOF])
