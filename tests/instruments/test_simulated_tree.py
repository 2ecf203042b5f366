"""Headers and parameters: SCPI-1999 volume 1 chapters 6 to 8 (from memory)."""

from __future__ import annotations

from collections.abc import Sequence

import pytest

from instruments.simulated.errors import ErrorQueue, ScpiError
from instruments.simulated.message import parse
from instruments.simulated.parameters import (
    Channels,
    Choice,
    Limit,
    Number,
    Parameter,
    Switch,
    Text,
    bind,
)
from instruments.simulated.tree import Entry, Tree

TREE = Tree(
    Entry(pattern, lambda: None)
    for pattern in (
        "[:SOURce]:VOLTage[:LEVel]",
        "[:SOURce]:VOLTage[:LEVel]?",
        "STATus:ISUMmary#:CONDition?",
        "*ESE",
    )
)
VOLTS = Number(0, 30, 5, "V")
CHANNELS = Channels(range(101, 106))
MODE = Choice(("CURRent", "VOLTage"))


def bound(parameters: Sequence[Parameter], data: str) -> tuple[object, ...]:
    (unit,) = parse("X " + data)
    assert unit.error is None
    return bind(parameters, unit.data)


def refused(parameters: Sequence[Parameter], data: str) -> int:
    with pytest.raises(ScpiError) as caught:
        bound(parameters, data)
    return caught.value.number


@pytest.mark.parametrize(
    "header", [":SOUR:VOLT", ":SOURCE:VOLTAGE:LEVEL", ":VOLT", ":VOLT:LEV", ":SOUR:VOLTAGE"]
)
def test_long_short_and_optional_nodes(header: str) -> None:
    assert TREE.find(header)[0].pattern == "[:SOURce]:VOLTage[:LEVel]"
    assert TREE.find(header + "?")[0].pattern == "[:SOURce]:VOLTage[:LEVel]?"


@pytest.mark.parametrize(
    "header",
    [":VOLTA", ":VOL", ":SOURC:VOLT", ":SOUR", ":VOLT:LEV:LEV", ":VOLT1", "*ESE?", "*ES", ":ESE"],
)
def test_nothing_between_long_and_short(header: str) -> None:
    """SCPI-1999 vol. 1 clause 6.2.1: exactly the long or the short form."""
    with pytest.raises(ScpiError) as caught:
        TREE.find(header)
    assert caught.value.number == -113
    assert str(caught.value) == f'-113,"Undefined header;{header}"'


def test_numeric_suffixes_default_to_one() -> None:
    """SCPI-1999 vol. 1 clause 6.2.5.2."""
    assert TREE.find(":STAT:ISUM2:COND?")[1] == (2,)
    assert TREE.find(":STAT:ISUMMARY:COND?")[1] == (1,)


@pytest.mark.parametrize(
    ("data", "volts"),
    [
        ("12", 12.0),
        ("+1.2e1", 12.0),
        ("12V", 12.0),
        ("12000 mV", 12.0),
        ("0.012 KV", 12.0),
        ("12E6uv", 12.0),
        ("MIN", 0.0),
        ("maximum", 30.0),
        ("DEF", 5.0),
    ],
)
def test_numbers_with_suffixes(data: str, volts: float) -> None:
    assert bound([VOLTS], data) == (pytest.approx(volts),)


def test_m_is_milli_but_mohm_is_mega() -> None:
    """IEEE 488.2 clause 7.7.3.3, table of multipliers."""
    assert bound([Number(0, 1e9, unit="OHM")], "2 MOHM") == (2e6,)
    assert bound([Number(0, 1e9, unit="A")], "2 MA") == (2e-3,)
    assert bound([Number(0, 1e9, unit="S")], "2 MS") == (2e-3,)


@pytest.mark.parametrize(
    ("parameter", "data", "number"),
    [
        (VOLTS, "12 A", -131),
        (VOLTS, "12 QV", -131),
        (VOLTS, "MAXI", -104),
        (VOLTS, "'12'", -104),
        (VOLTS, "31", -222),
        (VOLTS, "1,2", -108),
        (VOLTS, "", -109),
        (Number(0, 255), "1 V", -138),
        (Number(0, 10, steps=(1, 10)), "2", -224),
        (Switch(), "MAYBE", -224),
        (Switch(), "1 V", -138),
        (Choice(("CURRent", "VOLTage")), "CURRE", -224),
        (Choice(("CURRent",)), "1", -104),
        (Text(), "abc", -104),
        (CHANNELS, "(101)", -171),
        (CHANNELS, "(@101,)", -171),
        (CHANNELS, "(@100)", -222),
        (CHANNELS, "(@104:106)", -222),
    ],
)
def test_wrong_data(parameter: Parameter, data: str, number: int) -> None:
    assert refused([parameter], data) == number


def test_switches_choices_strings_and_channels() -> None:
    assert bound([Switch() for _ in range(4)], "ON,off,1,0.4") == (True, False, True, False)
    assert bound([MODE, MODE], "current,VOLT") == ("CURR", "VOLT")
    assert bound([Text()], "'a b'") == ("a b",)
    assert bound([CHANNELS], "(@101,103:105)") == ((101, 103, 104, 105),)
    assert bound([CHANNELS], "(@103:101)") == ((103, 102, 101),)


def test_optional_parameters_may_be_left_out() -> None:
    takes: list[Parameter] = [Limit(0, 30), CHANNELS]
    assert bound(takes, "(@101)") == (None, (101,))
    assert bound(takes, "MAX,(@101)") == (30.0, (101,))


def test_a_full_queue_ends_in_queue_overflow() -> None:
    """SCPI-1999 vol. 2 clause 21.8: the last entry is replaced by -350."""
    queue = ErrorQueue(size=3)
    for number in (-102, -103, -104, -108):
        queue.push(ScpiError(number))
    assert len(queue) == 3
    assert [queue.pop() for _ in range(4)] == [
        '-102,"Syntax error"',
        '-103,"Invalid separator"',
        '-350,"Queue overflow"',
        '0,"No error"',
    ]


def test_device_dependent_text_stays_one_short_line() -> None:
    """SCPI-1999 vol. 2 clause 21.8: at most 255 characters; a quote in a string is doubled."""
    text = str(ScpiError(-224, 'no "x"\nhere ' + "y" * 300))
    assert text.startswith('-224,"Illegal parameter value;no ""x"" here yyy')
    assert text.endswith('yyy..."')
    assert len(text.removeprefix('-224,"').replace('""', '"')) == 256  # with the closing quote
