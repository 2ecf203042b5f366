"""The entries of a dialect's tables: requests, numbers, and the table itself.

A request is the text of one or more SCPI units joined by ';'. Every unit starts at the root
(':' or '*'), so that requests can be joined into one message. Placeholders are in braces.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict, Field

Seconds = Annotated[float, Field(gt=0, le=600, allow_inf_nan=False)]
Tolerance = Annotated[float, Field(ge=0, allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
_PLACEHOLDER = re.compile(r"\{([^{}]*)\}")


def _request(*needed: str, query: bool, may: Sequence[str] = ("channel",)) -> AfterValidator:
    known = (*needed, *may)

    def check(text: str) -> str:
        found = _PLACEHOLDER.findall(text)
        for name in needed:
            if name not in found:
                raise ValueError(f"the placeholder {{{name}}} is missing")
        for name in found:
            if name not in known:
                allowed = ", ".join(f"{{{n}}}" for n in known)
                only = f"only {allowed} may be used" if allowed else "it takes no placeholder"
                raise ValueError(f"{{{name}}} means nothing here; {only}")
        if not text.isascii() or not text.isprintable() or re.search("[{}]", _strip(text)):
            raise ValueError("only printable ASCII is allowed, and braces only as placeholders")
        if any(unit[:1] not in {":", "*"} for unit in text.split(";")):
            raise ValueError("every unit has to start with ':' (the root) or '*'")
        if query and text.count("?") != 1:
            raise ValueError("exactly one query (with a '?') is needed here")
        if not query and "?" in text:
            raise ValueError("a command is needed here, not a query")
        return text

    return AfterValidator(check)


def _strip(text: str) -> str:
    return _PLACEHOLDER.sub("", text)


Command = Annotated[str, _request(query=False)]
Query = Annotated[str, _request(query=True)]
ValueCommand = Annotated[str, _request("value", query=False)]
RangeCommand = Annotated[str, _request("range", query=False)]
NplcCommand = Annotated[str, _request("nplc", query=False)]
BurstCommand = Annotated[str, _request("scans", "interval", query=False, may=("routes",))]
WholeCommand = Annotated[str, _request(query=False, may=())]
"""A command to the whole instrument: no channel."""
WholeQuery = Annotated[str, _request(query=True, may=())]


class Table(BaseModel):
    """A table of a dialect file: nothing unknown, nothing converted, nothing changed later."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


def requests_of(tables: dict[str, object], path: str = "") -> Iterator[tuple[str, str]]:
    """Every text that starts like a request in nested tables, with its dotted key."""
    for key, entry in tables.items():
        if isinstance(entry, dict):
            yield from requests_of(entry, f"{path}{key}.")
        elif isinstance(entry, str) and entry[:1] in {":", "*"}:
            yield f"{path}{key}", entry
