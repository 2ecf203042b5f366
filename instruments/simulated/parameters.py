"""What a command takes: converters from program data to Python values, with SCPI's errors.

SCPI-1999 volume 1 chapter 7 for MINimum, MAXimum and DEFault, booleans and channel lists, IEEE
488.2 clause 7.7.3 for suffixes (all from memory).
"""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

from instruments.simulated.errors import ScpiError
from instruments.simulated.message import Datum, Kind

PREFIXES = {
    "EX": 1e18, "PE": 1e15, "T": 1e12, "G": 1e9, "MA": 1e6, "K": 1e3, "": 1.0,
    "M": 1e-3, "U": 1e-6, "N": 1e-9, "P": 1e-12, "F": 1e-15, "A": 1e-18,
}  # fmt: skip
"""Suffix multipliers; M is milli and MA is mega, but MOHM and MHZ are mega (IEEE 488.2)."""


class Parameter(Protocol):
    """One parameter of a command."""

    @property
    def kinds(self) -> tuple[Kind, ...]:
        """Which kinds of data can be meant for it."""

    @property
    def optional(self) -> bool:
        """True when it may be left out; the handler then gets None."""

    def convert(self, datum: Datum) -> object:
        """Return the value; raise ScpiError."""


def bind(parameters: Sequence[Parameter], data: Sequence[Datum]) -> tuple[object, ...]:
    """Match data with parameters in order: -109 for too few, -108 for too many, -104 for wrong."""
    values: list[object] = []
    at = 0
    for parameter in parameters:
        if at < len(data) and data[at].kind in parameter.kinds:
            values.append(parameter.convert(data[at]))
            at += 1
        elif parameter.optional:
            values.append(None)
        else:
            raise ScpiError(-104 if at < len(data) else -109)
    if at < len(data):
        raise ScpiError(-108)
    return tuple(values)


def spelled(pattern: str, word: str) -> bool:
    """True when ``word`` (capitals) is the long or the short form of ``pattern`` ("VOLTage")."""
    return word in (pattern.upper(), "".join(c for c in pattern if not c.islower()))


@dataclass(frozen=True, slots=True)
class Number:
    """A number within limits, in the given unit; ``steps`` are the only values where given."""

    low: float
    high: float
    default: float | None = None
    unit: str = ""
    steps: tuple[float, ...] = ()
    optional: bool = False
    kinds: tuple[Kind, ...] = ("number", "word")

    def convert(self, datum: Datum) -> float:
        """Return the value in the plain unit."""
        if datum.kind == "word":
            return _limit(datum.text, self.low, self.high, self.default)
        value = datum.number * _factor(datum.suffix, self.unit)
        if not self.low <= value <= self.high:
            raise ScpiError(-222, f"{value:g} is outside {self.low:g} to {self.high:g}")
        if self.steps and value not in self.steps:
            allowed = ", ".join(f"{step:g}" for step in self.steps)
            raise ScpiError(-224, f"{value:g} is none of {allowed}")
        return value


@dataclass(frozen=True, slots=True)
class Limit:
    """The optional MINimum, MAXimum or DEFault of a query; the handler gets the number."""

    low: float
    high: float
    default: float | None = None
    optional: bool = True
    kinds: tuple[Kind, ...] = ("word",)

    def convert(self, datum: Datum) -> float:
        """Return what the word stands for."""
        return _limit(datum.text, self.low, self.high, self.default)


@dataclass(frozen=True, slots=True)
class Switch:
    """ON, OFF, or a number: whatever does not round to zero is ON (SCPI-1999 clause 7.3)."""

    optional: bool = False
    kinds: tuple[Kind, ...] = ("number", "word")

    def convert(self, datum: Datum) -> bool:
        """Return True for ON."""
        if datum.kind == "number":
            _factor(datum.suffix, "")
            return abs(datum.number) >= 0.5
        if datum.text not in ("ON", "OFF"):
            raise ScpiError(-224)
        return datum.text == "ON"


@dataclass(frozen=True, slots=True)
class Choice:
    """Character data: one of several words, in long or short form; gives the short form."""

    words: tuple[str, ...]
    optional: bool = False
    kinds: tuple[Kind, ...] = ("word",)

    def convert(self, datum: Datum) -> str:
        """Return the short form of the word."""
        for word in self.words:
            if spelled(word, datum.text):
                return "".join(c for c in word if not c.islower())
        raise ScpiError(-224)


@dataclass(frozen=True, slots=True)
class Text:
    """A string in either kind of quotes."""

    optional: bool = False
    kinds: tuple[Kind, ...] = ("string",)

    def convert(self, datum: Datum) -> str:
        """Return it without the quotes."""
        return datum.text


_RANGE = re.compile(r"\s*(\d+)\s*(?::\s*(\d+)\s*)?", re.ASCII)


@dataclass(frozen=True, slots=True)
class Channels:
    """A channel list ``(@101,103:105)``; gives a tuple of numbers in the order as sent."""

    allowed: Collection[int]
    optional: bool = False
    kinds: tuple[Kind, ...] = ("list",)

    def convert(self, datum: Datum) -> tuple[int, ...]:
        """Return the channels; -171 for a malformed list, -222 for a channel that is not there."""
        if not datum.text.startswith("@"):
            raise ScpiError(-171)
        channels: list[int] = []
        for part in datum.text[1:].split(","):
            found = _RANGE.fullmatch(part)
            if found is None or len(part) > 24:
                raise ScpiError(-171)
            first, last = int(found[1]), int(found[2] or found[1])
            if first not in self.allowed or last not in self.allowed:
                raise ScpiError(-222, f"there is no channel {part.strip()}")
            step = 1 if last >= first else -1
            channels += [n for n in range(first, last + step, step) if n in self.allowed]
        return tuple(channels)


def _limit(word: str, low: float, high: float, default: float | None) -> float:
    values: Mapping[str, float | None] = {"MINimum": low, "MAXimum": high, "DEFault": default}
    for pattern, value in values.items():
        if value is not None and spelled(pattern, word):
            return value
    raise ScpiError(-104)


def _factor(suffix: str, unit: str) -> float:
    """What a number with this suffix is multiplied with to be in ``unit``."""
    if not suffix:
        return 1.0
    if not unit:
        raise ScpiError(-138)
    if unit in ("OHM", "HZ") and suffix == "M" + unit:
        return 1e6
    prefix = suffix.removesuffix(unit)
    if not suffix.endswith(unit) or prefix not in PREFIXES:
        raise ScpiError(-131)
    return PREFIXES[prefix]
