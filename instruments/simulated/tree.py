"""The command tree: finds the entry of a table that a header means.

A pattern is written as manuals print it: ``[:SOURce]:VOLTage[:LEVel]``, capitals being the short
form, brackets an optional node, ``#`` a numeric suffix (1 when left out), ``?`` a query. Exactly
the long and the short form are understood and nothing between (SCPI-1999 vol. 1 clause 6.2.1).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

from instruments.simulated.errors import ScpiError
from instruments.simulated.parameters import Parameter

_NODE = re.compile(r"(\[?):?([A-Za-z]+)(#?)(\]?)")


@dataclass(frozen=True, slots=True)
class Entry:
    """One row of a command table: how it is spelled, what answers it, what it takes.

    The handler gets the numeric suffixes of '#' nodes first, then the converted parameters; it
    returns the response of a query and None for a command.
    """

    pattern: str
    handler: Callable[..., str | None]
    takes: tuple[Parameter, ...] = field(default=())


class Tree:
    """A table of commands, searched by absolute header."""

    def __init__(self, entries: Iterable[Entry]) -> None:
        self.entries = tuple(entries)
        self._compiled = [(re.compile(_regex(entry.pattern)), entry) for entry in self.entries]

    def find(self, header: str) -> tuple[Entry, tuple[int, ...]]:
        """Return the entry and the numeric suffixes; raise -113 when there is none.

        ``header`` is in capitals and absolute: ``:SOUR:VOLT?`` or ``*IDN?``.
        """
        for regex, entry in self._compiled:
            if found := regex.fullmatch(header):
                return entry, tuple(int(digits or "1") for digits in found.groups())
        raise ScpiError(-113, header)


def _regex(pattern: str) -> str:
    query = r"\?" if pattern.endswith("?") else ""
    if pattern.startswith("*"):
        return re.escape(pattern)
    nodes = ""
    for bracket, mnemonic, suffix, _ in _NODE.findall(pattern):
        short = "".join(c for c in mnemonic if c.isupper())
        node = f":(?:{mnemonic.upper()}|{short})" + (r"(\d{0,4})" if suffix else "")
        nodes += f"(?:{node})?" if bracket else node
    return nodes + query
