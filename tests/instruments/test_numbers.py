"""Numbers as IEEE 488.2 and SCPI-1999 spell them (forms and sentinels from memory)."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import InputError
from instruments.errors import BadNumber, ErrorEntry, NotANumber, Overload
from instruments.numbers import (
    format_number,
    parse_boolean,
    parse_entry,
    parse_integer,
    parse_list,
    parse_number,
    split_fields,
)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("12", 12.0),
        ("+12", 12.0),
        ("-0.5", -0.5),
        (".5", 0.5),
        ("5.", 5.0),
        ("1.234567E-01", 0.1234567),
        ("+1.00000e+03", 1000.0),
        ("  7 ", 7.0),
        ("9.8E37", 9.8e37),
    ],
)
def test_the_three_numeric_response_forms_are_read(text: str, value: float) -> None:
    assert parse_number(text) == value


@pytest.mark.parametrize(
    "text",
    ["", " ", "nan", "inf", "1_000", "1,5", "0x10", "1.2.3", "12\r", "--1", "1 2", "1²", "e5"],
)
def test_anything_else_is_no_number(text: str) -> None:
    with pytest.raises(BadNumber, match="not a number"):
        parse_number(text)


@pytest.mark.parametrize("text", ["1.0E38", "-9.91E37", "1e999"])
def test_a_number_beyond_the_sentinels_is_refused(text: str) -> None:
    with pytest.raises(BadNumber, match="larger than any"):
        parse_number(text)


# SCPI-1999: 9.9E+37 infinity, -9.9E+37 negative infinity, 9.91E+37 not a number (from memory).
@pytest.mark.parametrize("text", ["9.9E37", "9.90000000E+37", "99E36", "+9.9e+37"])
def test_infinity_is_an_overload(text: str) -> None:
    with pytest.raises(Overload, match="above") as caught:
        parse_number(text, "V")
    assert not caught.value.negative


def test_negative_infinity_is_an_overload_below() -> None:
    with pytest.raises(Overload, match="below") as caught:
        parse_number("-9.9E+37")
    assert caught.value.negative


def test_not_a_number_is_not_a_number() -> None:
    with pytest.raises(NotANumber):
        parse_number("9.91E+37")


# IEEE 488.2 suffix multipliers; M is milli except in MHZ and MOHM (from memory).
@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("12.5 V", "V", 12.5),
        ("12.5V", "V", 12.5),
        ("12.5 mV", "V", 0.0125),
        ("3 UA", "A", 3e-6),
        ("3 MA", "A", 3e-3),
        ("2 MOHM", "OHM", 2e6),
        ("2 KOHM", "OHM", 2e3),
        ("2 MHZ", "HZ", 2e6),
        ("5 MS", "S", 5e-3),
        ("23.5 CEL", "C", 23.5),
        ("23.5 C", "C", 23.5),
        ("4 W", "W", 4.0),
    ],
)
def test_a_unit_that_fits_is_understood(text: str, unit: str, value: float) -> None:
    assert parse_number(text, unit) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("12 A", "V"),
        ("12 V", None),
        ("300 K", "C"),
        ("73 FAR", "C"),
        ("1 MC", "C"),
        ("1 XV", "V"),
        ("1e", "V"),
    ],
)
def test_a_unit_that_does_not_fit_is_refused(text: str, unit: str | None) -> None:
    with pytest.raises(BadNumber, match="carries the unit"):
        parse_number(text, unit)


def test_booleans() -> None:
    assert parse_boolean("1") is True
    assert parse_boolean(" 0") is False
    assert parse_boolean("ON") is True
    with pytest.raises(BadNumber, match="boolean"):
        parse_boolean("2")


def test_integers() -> None:
    assert parse_integer("+512") == 512
    with pytest.raises(BadNumber, match="whole"):
        parse_integer("1.5")


def test_error_entries() -> None:
    assert parse_entry('0,"No error"') == ErrorEntry(0, "No error")
    assert parse_entry('-113,"Undefined header; :FOO ""x"""') == ErrorEntry(
        -113, 'Undefined header; :FOO "x"'
    )
    for text in ("0", "0,No error", '0,"No error', 'x,"No error"', '0,"No error"\r'):
        with pytest.raises(BadNumber, match="error-queue entry"):
            parse_entry(text)


def test_lists() -> None:
    assert parse_list("1,2.5,-3E0") == (1.0, 2.5, -3.0)
    with pytest.raises(BadNumber):
        parse_list("1,,2")
    with pytest.raises(Overload):
        parse_list("1,9.9E37")


def test_fields_are_not_split_inside_strings() -> None:
    assert split_fields("1;2;3") == ["1", "2", "3"]
    assert split_fields('1;-113,"a;b ""c;d"" e";2') == ["1", '-113,"a;b ""c;d"" e"', "2"]
    with pytest.raises(BadNumber, match="not closed"):
        split_fields('1;-113,"Undefined hea')


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (12, "12"),
        (0.0, "0"),
        (-0.0, "0"),
        (0.1 + 0.2, "0.3"),
        (1e-5, "0.00001"),
        (0.000012345678949, "0.0000123456789"),
        (100.0, "100"),
        (123456789.0, "123456789"),
        (1e-7, "1.0E-07"),
        (-2.5e-9, "-2.5E-09"),
        (1e12, "1.0E+12"),
    ],
)
def test_numbers_are_sent_plainly(value: float, text: str) -> None:
    assert format_number(value) == text


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_what_is_not_finite_is_never_sent(value: float) -> None:
    with pytest.raises(InputError, match="finite"):
        format_number(value)


@given(st.floats(-1e30, 1e30, allow_nan=False))
def test_what_is_sent_reads_back_to_nine_digits(value: float) -> None:
    # Half a unit in the ninth digit is at most 5e-9 of the value.
    assert parse_number(format_number(value)) == pytest.approx(value, rel=5e-9, abs=1e-300)
