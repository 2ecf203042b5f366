"""Reads one TOML file into a typed model, or says everything that is wrong with it at once."""

from __future__ import annotations

import difflib
import re
import tomllib
import typing
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError

from benchkit.errors import InputError


class FileModel(BaseModel):
    """Base of every table in a user's file: unknown keys are mistakes, values keep their type."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)


Model = TypeVar("Model", bound=FileModel)


def load(model: type[Model], path: Path) -> Model:
    """Return the file at ``path`` as a ``model``.

    Raises InputError with one line a mistake, each naming file, key, value and what would be
    right; the first line counts them when there are several.
    """
    try:
        # Some Windows editors put a byte-order mark first: it is no mistake.
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file") from None
    except IsADirectoryError:
        raise InputError(f"{path}: is a directory; give the file in it") from None
    except UnicodeDecodeError as error:
        line = bytes(error.object[: error.start]).count(b"\n") + 1
        raise InputError(
            f"{path}: line {line} is not UTF-8 text: save the file as UTF-8 in your editor"
        ) from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}") from None
    return parse(model, text, str(path))


def parse(model: type[Model], text: str, name: str) -> Model:
    """As ``load``, from text already read; ``name`` is the file's name in messages."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{name}: is not valid TOML: {error}{_quoted(text, error)}") from None
    except RecursionError:
        raise InputError(f"{name}: is not valid TOML: brackets within brackets, too deep") from None
    _check_kind(model, data, name)
    try:
        return model.model_validate(data, context={"file": name})
    except ValidationError as error:
        mistakes = list(dict.fromkeys(_mistakes(error, model, data)))
    lines = [f"{name}: {mistake}" for mistake in mistakes]
    if len(lines) > 1:
        lines.insert(0, f"{name}: {len(mistakes)} mistakes")
    raise InputError("\n".join(lines)) from None


def _quoted(text: str, error: tomllib.TOMLDecodeError) -> str:
    """The line that the parser stumbled over: its own words do not say which key it is."""
    place = re.search(r"at line (\d+)", str(error))
    if place is None:
        return ""
    line = text.split("\n")[int(place[1]) - 1].strip()
    hint = "; a number stands without a unit, with a point" if NO_NUMBER.search(line) else ""
    return f": {_short(line)}{hint}" if line else ""


NO_NUMBER = re.compile(r"=\s*[+-]?\d+([.]\d+)?\s*(,\s*\d|[A-Za-z%°µ])")
"""Such as ``= 12V`` or ``= 12,5``."""


def _check_kind(model: type[BaseModel], data: Mapping[str, Any], name: str) -> None:
    """InputError for a file of another kind, in one sentence instead of a list of all its keys."""
    wanted = [key for key, field in model.model_fields.items() if field.is_required()]
    if data and not set(data) & set(model.model_fields):
        raise InputError(
            f"{name}: has [{'], ['.join(map(str, list(data)[:4]))}]: this is another kind of file; "
            f"here one with [{'], ['.join(wanted)}] is needed"
        )


WANTED = {
    "float_type": "it must be a number",
    "int_type": "it must be a whole number",
    "string_type": "it must be text in quotes",
    "bool_type": "it must be true or false",
    "list_type": "it must be a list: [ ... ]",
    "model_type": "it must be a table of keys and values",
    "model_attributes_type": "it must be a table of keys and values",
    "dict_type": "it must be a table of keys and values",
    "date_type": "it must be a date such as 2027-06-30, without quotes",
}
"""What is right, for a value of the wrong type."""


def _mistakes(error: ValidationError, model: type[BaseModel], data: object) -> Iterator[str]:
    for item in error.errors(include_url=False):
        kind, context = item["type"], item.get("ctx", {})
        path = _path(item["loc"], data, missing=kind == "missing")
        key = _spell(path)
        if kind == "extra_forbidden":
            yield f"{key} is not a key here" + _nearest(path, model, data)
        elif kind == "missing":
            yield f"{key} is missing"
        elif kind == "union_tag_not_found":
            yield f"{key}.kind is missing: it says what kind of part this is"
        elif kind == "union_tag_invalid":
            right = context["expected_tags"]
            yield f"{key}.kind is {context['tag']!r}, it must be one of {right}"
        elif kind == "literal_error" and item["loc"][-1] == "[key]":
            yield f"{key} cannot stand here: it must be {context['expected']}"
        elif kind == "too_short":
            there, least = context["actual_length"], context["min_length"]
            yield f"{key} is too short: it holds {there}, and at least {least} are needed"
        elif kind == "string_too_long":
            yield f"{key} is longer than {context['max_length']} characters"
        elif kind == "literal_error":
            yield f"{key} is {item['input']!r}, it must be {context['expected']}"
        elif kind == "value_error":
            yield f"{key}: {context['error']}" if key else str(context["error"])
        else:
            plain = item["msg"].replace("Input should", "it must")
            plain = plain[:1].lower() + plain[1:]
            yield f"{key} is {_short(item['input'])}, {WANTED.get(kind, plain)}"


def _short(value: object) -> str:
    """A value as it may stand in a message: a whole table does not."""
    if isinstance(value, Mapping):
        return "a table"
    text = str(value).lower() if isinstance(value, bool) else repr(value)
    return text if len(text) <= 60 else "a list" if isinstance(value, list) else text[:60] + "..."


def _path(loc: tuple[int | str, ...], data: object, *, missing: bool) -> list[int | str]:
    """Pydantic's path of a mistake without the tags of unions, which the file does not have.

    ``missing``: the last step is a key that the file should have had.
    """
    path: list[int | str] = []
    here: Any = data
    for number, step in enumerate(loc):
        below = _below(here, step)
        if below is not None:
            here = below
        elif not (missing and number == len(loc) - 1):
            continue
        path.append(step)
    return path


def _below(here: Any, step: int | str) -> Any:
    """What stands under a key or index of a table or list; None when nothing does."""
    if isinstance(here, Mapping):
        return here.get(step)
    if isinstance(here, list) and isinstance(step, int) and step < len(here):
        return here[step]
    return None


def _spell(path: list[int | str]) -> str:
    """A path as a person would name it: entries of a list are counted from one."""
    text = ""
    for step in path:
        if isinstance(step, int):
            text += f"[{step + 1}]"
        else:
            text += f".{step}" if text else step
    return text


def _nearest(path: list[int | str], model: type[BaseModel], data: object) -> str:
    names = _fields_at(path[:-1], model, data)
    near = difflib.get_close_matches(str(path[-1]), names, n=1, cutoff=0.5)
    if near:
        return f"; the nearest right one is {near[0]}"
    return f"; the keys here are {', '.join(sorted(names))}" if names else ""


def _fields_at(where: list[int | str], annotation: Any, data: Any) -> list[str]:
    """The keys that are right at a place of the file, found by walking the annotations."""
    models = _models(annotation)
    tag = data.get("kind") if isinstance(data, Mapping) else None
    models = [m for m in models if tag in _tags(m)] or models
    if not where:
        return list(dict.fromkeys(name for m in models for name in m.model_fields))
    step, rest = where[0], where[1:]
    below = _below(data, step)
    for model in models:
        if isinstance(step, str) and step in model.model_fields:
            return _fields_at(rest, model.model_fields[step].annotation, below)
    if models:
        return []
    arguments = typing.get_args(annotation)
    return _fields_at(rest, arguments[-1], below) if arguments else []


def _tags(model: type[BaseModel]) -> tuple[object, ...]:
    """The values of ``kind`` that choose this model in a union."""
    field = model.model_fields.get("kind")
    return typing.get_args(field.annotation) if field is not None else ()


def _models(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    origin = typing.get_origin(annotation)
    if origin in (list, dict, tuple, Mapping):
        return []
    return [m for a in typing.get_args(annotation) for m in _models(a)]
