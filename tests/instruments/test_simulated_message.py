"""Program messages: IEEE 488.2 clause 7 and SCPI-1999 volume 1 chapter 6 (from memory)."""

from __future__ import annotations

import pytest

from instruments.simulated.message import Unit, end_of_message, parse


def headers(text: str) -> list[str]:
    units = parse(text)
    assert all(unit.error is None for unit in units), units
    return [unit.header for unit in units]


def number_of(unit: Unit) -> int:
    return unit.error.number if unit.error else 0


@pytest.mark.parametrize(
    ("message", "expected"),
    [
        # SCPI-1999 vol. 1, 6.2.4: the first header starts at the root, with or without colon
        ("SOUR:VOLT 1", [":SOUR:VOLT"]),
        (":SOUR:VOLT 1", [":SOUR:VOLT"]),
        # ... the next one continues at the level of the last
        (":SOUR:VOLT:LEV 1;PROT 2", [":SOUR:VOLT:LEV", ":SOUR:VOLT:PROT"]),
        # ... a leading colon returns to the root
        (":SOUR:VOLT 1;:OUTP ON", [":SOUR:VOLT", ":OUTP"]),
        # ... common commands leave the path as it is
        (":SOUR:VOLT 1;*ESR?;CURR 2", [":SOUR:VOLT", "*ESR?", ":SOUR:CURR"]),
        # ... and so does a deeper relative header: it moves the path down
        (":SOUR:VOLT 1;CURR:PROT 2;STAT ON", [":SOUR:VOLT", ":SOUR:CURR:PROT", ":SOUR:CURR:STAT"]),
        # IEEE 488.2, 7.6.1: mnemonics are not case-sensitive; 7.4.1.2: white space around
        ("  sour:Volt?  ;  :outp?", [":SOUR:VOLT?", ":OUTP?"]),
        ("", []),
        (" \r", []),
    ],
)
def test_headers_become_absolute(message: str, expected: list[str]) -> None:
    assert headers(message) == expected


def test_data_of_every_kind() -> None:
    """IEEE 488.2 clause 7.7: decimal, character, string, block, expression data; non-decimal."""
    (unit,) = parse('X -1.5E+1 mV , ON,\'it\'\'s; "so"\',"a""b",(@1,3:4), #15a;b\'c,#HfF,#B101,.5')
    assert [datum.kind for datum in unit.data] == [
        "number", "word", "string", "string", "list", "block", "number", "number", "number",
    ]  # fmt: skip
    assert (unit.data[0].number, unit.data[0].suffix) == (-15.0, "MV")
    assert [d.text for d in unit.data[1:6]] == ["ON", 'it\'s; "so"', 'a"b', "@1,3:4", "a;b'c"]
    assert [d.number for d in unit.data[6:]] == [255.0, 5.0, 0.5]


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("VOLT 1,", -102),
        ("VOLT ,1", -102),
        ("VOLT::LEV 1", -102),
        (":", -102),
        ("VOLT 1 2", -103),
        ("VOLT 1:2", -121),
        ("VOLT 1.2.3", -121),
        ("VOLT @1", -101),
        ("\xe9VOLT 1", -101),
        ("VOLT(@1)", -111),
        ("VOLTAGEISTOOLONG 1", -112),
        ("VOLT (@1", -171),
        ("VOLT #X", -161),
    ],
)
def test_malformed_units_keep_the_next_one(message: str, number: int) -> None:
    first, second = parse(message + ";:SYST:ERR?")
    assert number_of(first) == number
    assert second == Unit(":SYST:ERR?")


@pytest.mark.parametrize(
    ("message", "number"), [("NAME 'abc;:OUTP ON", -151), ("DATA #240abc;:OUTP ON", -161)]
)
def test_what_has_no_end_swallows_the_rest(message: str, number: int) -> None:
    assert [number_of(unit) for unit in parse(":VOLT 1;" + message)] == [0, number]


def test_an_empty_unit_is_a_syntax_error() -> None:
    assert [number_of(unit) for unit in parse("*CLS;;*CLS;")] == [0, -102, 0, -102]


@pytest.mark.parametrize(
    ("received", "end"),
    [
        (b"*CLS\n*IDN?\n", 4),
        (b"*CLS", -1),
        (b"DATA #13a\nb\n", 11),  # IEEE 488.2 clause 7.7.6: a newline in a block is data
        (b"DATA #13a\n", -1),
        (b"NAME '#13a\n", 10),
        (b"NAME '#1',#H1\n", 13),
    ],
)
def test_where_a_message_ends(received: bytes, end: int) -> None:
    assert end_of_message(received) == end
