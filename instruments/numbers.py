"""SCPI's spelling of numbers, booleans, lists and error-queue entries, read strictly.

Source of the forms: IEEE 488.2 (NR1, NR2, NR3 response data, suffix multipliers) and SCPI-1999
(9.9E37 for infinity, -9.9E37 for negative infinity, 9.91E37 for not-a-number), from memory.
"""

from __future__ import annotations

import math
import re
from decimal import Decimal

from benchkit.errors import InputError
from instruments.errors import BadNumber, ErrorEntry, NotANumber, Overload

INFINITY = 9.9e37
NOT_A_NUMBER = 9.91e37

# float() alone would also take 'nan', '1_000' and the digits of other scripts.
_NUMBER = re.compile(r" *([+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?) *([A-Za-z]*) *")
_ENTRY = re.compile(r' *([+-]?[0-9]+) *, *"((?:[^"]|"")*)" *')
_UNITS = {
    "V": ("V",),
    "A": ("A",),
    "OHM": ("OHM",),
    "S": ("S",),
    "HZ": ("HZ",),
    "W": ("W",),
    "C": ("CEL", "C"),
}
_MULTIPLIERS = {
    "": 1.0,
    "G": 1e9,
    "MA": 1e6,
    "K": 1e3,
    "M": 1e-3,
    "U": 1e-6,
    "N": 1e-9,
    "P": 1e-12,
}
# IEEE 488.2 makes these two exceptions: MHZ and MOHM are mega, everything else with M is milli.
_MEGA_BY_M = ("HZ", "OHM")
SENT_DIGITS = 9
_PLAIN_FROM, _PLAIN_BELOW = 1e-6, 1e9


def parse_number(text: str, unit: str | None = None) -> float:
    """A number in NR1, NR2 or NR3 form, in ``unit`` (a key of V, A, OHM, S, HZ, W, C).

    A suffix is understood when it fits the unit ('12.5 MV' is 0.0125 V) and refused otherwise;
    with no unit, any suffix is refused. Raises Overload, NotANumber or BadNumber.
    """
    match = _NUMBER.fullmatch(text)
    if match is None:
        raise BadNumber(f"{text!r} is not a number")
    digits, suffix = match.groups()
    value = float(digits)
    if value >= INFINITY or value <= -INFINITY:
        _refuse_sentinel(value, text)
    return value * _factor(suffix.upper(), unit, text) if suffix else value


def parse_boolean(text: str) -> bool:
    """SCPI's boolean answer: 1 or 0 (ON and OFF are taken too); raises BadNumber."""
    word = text.strip(" ").upper()
    if word in {"1", "ON"}:
        return True
    if word in {"0", "OFF"}:
        return False
    raise BadNumber(f"{text!r} is not a boolean: 0 or 1 was expected")


def parse_integer(text: str) -> int:
    """A whole number as status registers answer it, in NR1 or as a whole NR2; raises BadNumber."""
    value = parse_number(text)
    if not value.is_integer():
        raise BadNumber(f"{text!r} is not a whole number")
    return int(value)


def parse_entry(text: str) -> ErrorEntry:
    """An error-queue entry such as ``-113,"Undefined header"``; raises BadNumber."""
    match = _ENTRY.fullmatch(text)
    if match is None:
        raise BadNumber(f'{text!r} is not an error-queue entry such as 0,"No error"')
    return ErrorEntry(int(match[1]), match[2].replace('""', '"'))


def parse_list(text: str, unit: str | None = None) -> tuple[float, ...]:
    """Numbers separated by commas; raises as ``parse_number`` does, for the first bad one."""
    return tuple(parse_number(field, unit) for field in text.split(","))


def split_fields(line: str) -> list[str]:
    """The answers of a compound message: split at ';', but not inside a quoted string.

    A doubled quote inside a string toggles twice and so changes nothing. Raises BadNumber when
    a string is not closed, which is what a truncated line looks like.
    """
    if '"' not in line:
        return line.split(";")
    fields: list[str] = []
    pieces: list[str] = []
    quotes = 0
    for piece in line.split(";"):
        pieces.append(piece)
        quotes += piece.count('"')
        if quotes % 2 == 0:
            fields.append(";".join(pieces))
            pieces = []
    if pieces:
        raise BadNumber(f"a quoted string is not closed in {line!r}")
    return fields


def format_number(value: float) -> str:
    """A number as it is sent: plain digits (NR2) where that is short, else NR3 with a point.

    Nine significant digits; 0.00001 is sent as such, because some instruments refuse exponents.
    Raises InputError for what is not a finite number.
    """
    if not math.isfinite(value):
        raise InputError(f"{value!r} cannot be sent to an instrument: a finite number is needed")
    size = abs(value)
    if size != 0.0 and not _PLAIN_FROM <= size < _PLAIN_BELOW:
        mantissa, exponent = f"{value:.{SENT_DIGITS - 1}E}".split("E")
        mantissa = mantissa.rstrip("0")
        return f"{mantissa}0E{exponent}" if mantissa.endswith(".") else f"{mantissa}E{exponent}"
    plain = format(Decimal(f"{value:.{SENT_DIGITS - 1}E}"), "f")
    plain = plain.rstrip("0").rstrip(".") if "." in plain else plain
    return "0" if plain in {"-0", ""} else plain


def _refuse_sentinel(value: float, text: str) -> None:
    if value == INFINITY:
        raise Overload
    if value == -INFINITY:
        raise Overload(negative=True)
    if value == NOT_A_NUMBER:
        raise NotANumber
    raise BadNumber(f"{text!r} is larger than any number SCPI can mean")


def _factor(suffix: str, unit: str | None, text: str) -> float:
    if unit is None:
        raise BadNumber(f"{text!r} carries the unit {suffix!r} where none was expected")
    for name in _UNITS[unit]:
        if not suffix.endswith(name):
            continue
        prefix = suffix[: -len(name)]
        if prefix == "M" and name in _MEGA_BY_M:
            return 1e6
        if unit == "C" and prefix:
            continue
        if prefix in _MULTIPLIERS:
            return _MULTIPLIERS[prefix]
    raise BadNumber(f"{text!r} carries the unit {suffix!r} where {unit} was expected")
