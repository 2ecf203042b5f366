"""Program messages: from a line of text to units with absolute headers and typed data.

After IEEE 488.2 clause 7 and SCPI-1999 volume 1 chapters 6 and 7 (both from memory). Only form
is judged here: whether a header exists and what its data mean is for ``tree`` and ``parameters``.

A unit that is malformed becomes a Unit that carries its error; the units behind it are still
found, because ';' outside strings and blocks ends a unit whatever is in it. Only a string or a
block without an end swallows the rest of the message: nobody can tell where it was to stop.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from instruments.simulated.errors import ScpiError

Kind = Literal["number", "word", "string", "list", "block"]

LONGEST_MNEMONIC = 12
"""IEEE 488.2 clause 7.6.1.4.1: a program mnemonic has at most 12 characters."""

_SPECIAL = re.compile(r"""[;"'#]""")
_FRAMING = re.compile(r"""[\n"'#]""")
_STRING = re.compile(r""""(?:[^"\n]|"")*"|'(?:[^'\n]|'')*'""")
_HEADER = re.compile(r"\s*(\*[A-Za-z]\w*|:?[A-Za-z]\w*(?::[A-Za-z]\w*)*)(\??)", re.ASCII)
_NUMBER = re.compile(
    r"([+-]?(?:\d+\.?\d*|\.\d+)(?:\s*[Ee]\s*[+-]?\d+)?)"
    r"(?:\s*([A-Za-z/][A-Za-z0-9/.*^-]*))?", re.ASCII
)  # fmt: skip
_WORD = re.compile(r"[A-Za-z]\w*", re.ASCII)
_LIST = re.compile(r"\([^()]*\)")
_BASED = re.compile(r"#(?:[Hh]([0-9A-Fa-f]+)|[Qq]([0-7]+)|[Bb]([01]+))")


@dataclass(frozen=True, slots=True)
class Datum:
    """One item of program data.

    ``text`` is the word in capitals, the string without its quotes, the expression between its
    parentheses or the bytes of the block (as Latin-1); a number has ``number`` and ``suffix``.
    """

    kind: Kind
    text: str
    number: float = math.nan
    suffix: str = ""


@dataclass(frozen=True, slots=True)
class Unit:
    """One program message unit: absolute header in capitals, "?" at its end for a query."""

    header: str
    data: tuple[Datum, ...] = ()
    error: ScpiError | None = None

    @property
    def is_query(self) -> bool:
        """True when the header ends in a question mark."""
        return self.header.endswith("?")


def end_of_message(received: bytes | bytearray) -> int:
    """Index of the newline that ends the first message, or -1 when it has not arrived.

    A newline inside a definite-length block is data (IEEE 488.2 clause 7.7.6).
    """
    end = received.find(b"\n")
    if end < 0 or received.find(b"#", 0, end) < 0:
        return end
    text = received.decode("latin-1")
    at = 0
    while found := _FRAMING.search(text, at):
        at = found.start()
        if text[at] == "\n":
            return at
        if text[at] == "#":
            stop = _block_end(text, at)
            if stop is None:
                at += 1
            elif stop > len(text):
                return -1
            else:
                at = stop
        else:
            string = _STRING.match(text, at)
            if string is None:  # never closed: it ends with the line, and parsing will say so
                return text.find("\n", at)
            at = string.end()
    return -1


def parse(text: str) -> tuple[Unit, ...]:
    """Split a message without its terminator into units; an empty message has none.

    The header path follows SCPI-1999 volume 1 clause 6.2.4: the first unit starts at the root,
    a leading ':' returns to the root, a header without it continues at the level of the last
    one, and common commands leave the path as it is.
    """
    if not text.strip():
        return ()
    units: list[Unit] = []
    path = ""
    try:
        for body in _bodies(text):
            unit, path = _unit(body, path)
            units.append(unit)
    except ScpiError as error:
        units.append(Unit("", error=error))
    return tuple(units)


def _bodies(text: str) -> Iterator[str]:
    start = at = 0
    while found := _SPECIAL.search(text, at):
        at = found.start()
        if text[at] == ";":
            yield text[start:at]
            start = at = at + 1
        elif text[at] == "#":
            stop = _block_end(text, at)
            if stop is not None and stop > len(text):
                raise ScpiError(-161, "the block is shorter than it says")
            at = at + 1 if stop is None else stop
        else:
            string = _STRING.match(text, at)
            if string is None:
                raise ScpiError(-151, "the string has no closing quote")
            at = string.end()
    yield text[start:]


def _block_end(text: str, at: int) -> int | None:
    """Where the block that starts at ``at`` ends, perhaps behind the text; None if none does."""
    digits = text[at + 1 : at + 2]
    if not digits.isdigit():
        return None
    if digits == "0":  # indefinite length: ends with the message
        return len(text)
    first = at + 2 + int(digits)
    length = text[at + 2 : first]
    if len(length) < int(digits):
        return len(text) + 1
    return first + int(length) if length.isdigit() else None


def _unit(body: str, path: str) -> tuple[Unit, str]:
    head = _HEADER.match(body)
    if head is None:
        first = body.strip()[:1]
        number = -102 if not first or first in ":*?," else -101
        return Unit("", error=ScpiError(number)), path
    header = head[1].upper()
    if not header.startswith("*"):
        if not header.startswith(":"):
            header = path + ":" + header
        path = header[: header.rindex(":")]
    header += head[2]
    try:
        if any(len(mnemonic) > LONGEST_MNEMONIC for mnemonic in header.strip("?").split(":")):
            raise ScpiError(-112)
        data = tuple(_data(body, head.end()))
    except ScpiError as error:
        return Unit(header, error=error), path
    return Unit(header, data), path


def _data(body: str, at: int) -> Iterator[Datum]:
    start = _blank(body, at)
    if start == len(body):
        return
    if start == at:
        raise ScpiError(-102 if body[at] in ":?*" else -111)
    at = start
    while True:
        datum, end = _datum(body, at)
        yield datum
        at = _blank(body, end)
        if at == len(body):
            return
        if body[at] != ",":
            if datum.kind == "number" and at == end:
                raise ScpiError(-121)
            raise ScpiError(-103)
        at = _blank(body, at + 1)


def _blank(body: str, at: int) -> int:
    while at < len(body) and body[at] in " \t\r\f\v":
        at += 1
    return at


def _datum(body: str, at: int) -> tuple[Datum, int]:
    sign = body[at : at + 1]
    if found := _NUMBER.match(body, at):
        text = "".join(found[1].split())
        return Datum("number", text, float(text), (found[2] or "").upper()), found.end()
    if found := _WORD.match(body, at):
        return Datum("word", found[0].upper()), found.end()
    if sign == "(":
        if found := _LIST.match(body, at):
            return Datum("list", found[0][1:-1].strip()), found.end()
        raise ScpiError(-171)
    if sign and sign in "\"'" and (found := _STRING.match(body, at)):
        return Datum("string", found[0][1:-1].replace(sign * 2, sign)), found.end()
    if sign == "#":
        if found := _BASED.match(body, at):
            base = {1: 16, 2: 8, 3: 2}[found.lastindex or 1]
            return Datum("number", found[0], float(int(found[found.lastindex or 1], base))), (
                found.end()
            )
        stop = _block_end(body, at)
        if stop is None or stop > len(body):
            raise ScpiError(-161)
        first = at + 2 + int(body[at + 1])
        return Datum("block", body[first:stop]), stop
    raise ScpiError(-102 if not sign or sign in ",:*?+-." else -101)
