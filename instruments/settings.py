"""A setting that is read back, and when its read-back counts as what was asked for."""

from __future__ import annotations

from dataclasses import dataclass

from instruments.errors import BadNumber
from instruments.numbers import parse_boolean, parse_number


@dataclass(frozen=True, slots=True)
class Setting:
    """A command together with the query that reads it back and what the answer has to be.

    A number may differ by ``tolerance`` (the instrument's own resolution, same unit); a bool is
    compared as SCPI's 0 and 1; a str is a mnemonic in its short form, and the long form is
    accepted too.
    """

    command: str
    query: str
    expected: float | bool | str
    tolerance: float = 0.0

    def agrees(self, answer: str) -> bool:
        """True when the read-back is what was asked for; raises BadNumber, Overload."""
        if isinstance(self.expected, bool):
            return parse_boolean(answer) is self.expected
        if isinstance(self.expected, str):
            word = answer.strip(' "').upper()
            if not word.isalpha():
                raise BadNumber(f"{answer!r} is not a mnemonic")
            return word.startswith(self.expected.upper())
        return abs(parse_number(answer) - self.expected) <= self.tolerance
