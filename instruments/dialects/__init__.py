"""Dialects: TOML files that say how one family of instruments spells its requests.

The shipped ones are SCPI-1999 baselines. A user's own file is named by its path (ending in
``.toml``); copying a shipped one and changing what differs is the way to write it.
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Iterator
from importlib import resources
from pathlib import Path
from typing import Any, TypeVar, get_args

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from benchkit.errors import InputError
from instruments.dialects.entries import requests_of
from instruments.dialects.tables import (
    Dialect,
    LoadDialect,
    MeterDialect,
    SupplyDialect,
    SwitchDialect,
    ThermometerDialect,
    Timing,
)

__all__ = [
    "Dialect",
    "LoadDialect",
    "MeterDialect",
    "SupplyDialect",
    "SwitchDialect",
    "ThermometerDialect",
    "Timing",
    "load_dialect",
    "shipped_dialects",
]

D = TypeVar("D", bound=Dialect)

_KINDS: dict[str, type[Dialect]] = {
    "supply": SupplyDialect,
    "meter": MeterDialect,
    "thermometer": ThermometerDialect,
    "load": LoadDialect,
    "switch": SwitchDialect,
}


def shipped_dialects() -> tuple[str, ...]:
    """The names of the dialects that come with the package, sorted."""
    files = resources.files(__name__).iterdir()
    return tuple(sorted(f.name.removesuffix(".toml") for f in files if f.name.endswith(".toml")))


def load_dialect(name_or_path: str | Path, kind: type[D]) -> D:
    """A shipped dialect by its name, or a file by its path ending in '.toml'.

    ``kind`` is the class that is needed, such as SupplyDialect; Dialect takes any. Raises
    InputError that lists every mistake of the file, each with its key.
    """
    file = str(name_or_path)
    if file.endswith(".toml"):
        name = Path(file).stem
        try:
            text = Path(file).read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError) as fault:
            raise InputError(f"{file}: the dialect cannot be read: {fault}") from fault
    else:
        name, file = file, f"{file}.toml"
        if name not in shipped_dialects():
            close = difflib.get_close_matches(name, shipped_dialects(), 1)
            guess = f"; did you mean {close[0]!r}?" if close else ""
            raise InputError(
                f"there is no dialect {name!r}{guess}. Shipped are "
                f"{', '.join(shipped_dialects())}; your own file is named by its path, ending in "
                "'.toml'"
            )
        text = resources.files(__name__).joinpath(file).read_text(encoding="utf-8")
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as fault:
        raise InputError(f"{file}: this is not TOML: {fault}") from fault
    dialect = _validate(name, file, raw)
    if not isinstance(dialect, kind):
        needed = next(word for word, model in _KINDS.items() if issubclass(model, kind))
        raise InputError(f"{file}: kind: {dialect.kind!r} was found where a {needed!r} is needed")
    return dialect


def _validate(name: str, file: str, raw: dict[str, Any]) -> Dialect:
    model = _KINDS.get(str(raw.get("kind")))
    if model is None:
        raise InputError(f"{file}: kind: {raw.get('kind')!r} is none of {', '.join(_KINDS)}")
    mistakes: list[str] = []
    if "name" in raw:
        mistakes.append("name: leave it out; a dialect's name is that of its file")
    dialect: Dialect | None = None
    try:
        dialect = model.model_validate({**raw, "name": name})
    except ValidationError as fault:
        mistakes += [_sentence(model, error) for error in fault.errors()]
    mistakes += _channel_mistakes(raw)
    if mistakes or dialect is None:
        raise InputError("\n".join(f"{file}: {mistake}" for mistake in mistakes))
    return dialect


def _channel_mistakes(raw: dict[str, Any]) -> Iterator[str]:
    """Requests that name a channel where there is none, or do not where there has to be one."""
    channels = raw.get("channels")
    style = channels.get("style") if isinstance(channels, dict) else None
    apart = {"link", "channels", "about", "burst"}
    tables = {key: table for key, table in raw.items() if key not in apart}
    for key, request in requests_of(tables):
        named = "{channel}" in request
        if style == "none" and named:
            yield f"{key}: {{channel}} means nothing with channels.style 'none'"
        if style in {"list", "prefix"} and not named:
            yield f"{key}: the placeholder {{channel}} is missing (channels.style is {style!r})"
    if isinstance(raw.get("burst"), dict):
        prepare = str(raw["burst"].get("prepare", ""))
        named = "{routes}" in prepare
        if style == "none" and named:
            yield "burst.prepare: {routes} means nothing with channels.style 'none'"
        if style in {"list", "prefix"} and prepare and not named:
            yield (
                "burst.prepare: the placeholder {routes} is missing "
                f"(channels.style is {style!r})"
            )
    if isinstance(raw.get("link"), dict) and "{" in str(raw["link"].get("error_query", "")):
        yield "link.error_query: the error queue belongs to the whole instrument: no placeholder"


def _sentence(model: type[BaseModel], error: ErrorDetails) -> str:
    where = [str(part) for part in error["loc"]]
    key = ".".join(where)
    match error["type"]:
        case "missing":
            return f"{key}: this entry is missing"
        case "extra_forbidden":
            known = sorted(_fields_at(model, where[:-1]))
            close = difflib.get_close_matches(where[-1], known, 1)
            hint = f"did you mean {close[0]!r}?" if close else f"known are {', '.join(known)}"
            return f"{key}: unknown key; {hint}"
        case "value_error":
            return f"{key}: {error['ctx']['error']!s} (given: {error['input']!r})"
        case _:
            return f"{key}: {error['msg'].lower()} (given: {error['input']!r})"


def _fields_at(model: type[BaseModel], where: list[str]) -> set[str]:
    for part in where:
        field = model.model_fields.get(part)
        inner = (field.annotation, *get_args(field.annotation)) if field else ()
        tables = [a for a in inner if isinstance(a, type) and issubclass(a, BaseModel)]
        if not tables:
            return set()
        model = tables[0]
    return set(model.model_fields) - {"name"}
