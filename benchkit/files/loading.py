"""Reads one TOML file into a typed model, or says everything that is wrong with it at once."""

from __future__ import annotations

import difflib
import tomllib
import typing
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError

from benchkit.errors import InputError


class FileModel(BaseModel):
    """Base of every table in a user's file: unknown keys are mistakes, values keep their type."""

    model_config = ConfigDict(
        extra="forbid", frozen=True, strict=True, allow_inf_nan=False
    )


Model = TypeVar("Model", bound=FileModel)


def load(model: type[Model], path: Path) -> Model:
    """Return the file at ``path`` as a ``model``.

    Raises InputError with one line a mistake, each naming file, key, value and what would be
    right; the first line counts them when there are several.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file") from None
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read as UTF-8 text: {error}") from None
    return parse(model, text, str(path))


def parse(model: type[Model], text: str, name: str) -> Model:
    """As ``load``, from text already read; ``name`` is the file's name in messages."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{name}: is not valid TOML: {error}") from None
    try:
        return model.model_validate(data, context={"file": name})
    except ValidationError as error:
        mistakes = list(dict.fromkeys(_mistakes(error, model, data)))
    lines = [f"{name}: {mistake}" for mistake in mistakes]
    if len(lines) > 1:
        lines.insert(0, f"{name}: {len(mistakes)} mistakes")
    raise InputError("\n".join(lines)) from None


def _mistakes(error: ValidationError, model: type[BaseModel], data: object) -> Iterator[str]:
    for item in error.errors(include_url=False):
        where = [part for part in item["loc"] if _stands_in(part, item["loc"], data)]
        key = _spell(where) or "the file"
        kind, context = item["type"], item.get("ctx", {})
        if kind == "extra_forbidden":
            yield f"{key} is not a key here" + _nearest(where, model, data)
        elif kind == "missing":
            yield f"{_spell(list(item['loc']), data)} is missing"
        elif kind in ("union_tag_invalid", "literal_error", "enum"):
            expected = context.get("expected_tags") or context.get("expected")
            tag = context.get("tag", item["input"])
            name = key + ".kind" if kind == "union_tag_invalid" else key
            yield f"{name} is {tag!r}, it must be one of {expected}"
        elif kind == "union_tag_not_found":
            yield f"{key}.kind is missing: it says what kind of part this is"
        elif kind == "value_error":
            yield f"{key}: {context['error']}"
        else:
            yield f"{key} is {item['input']!r}: {_plain(item['msg'])}"


def _plain(message: str) -> str:
    return message[0].lower() + message[1:] if message else message


def _stands_in(part: object, loc: tuple[int | str, ...], data: object) -> bool:
    """Pydantic puts the tag of a union into the path; keep only what the file itself has."""
    here: Any = data
    for step in loc:
        try:
            nxt = here[step]
        except (KeyError, IndexError, TypeError):
            if step == part:
                return step == loc[-1]
            continue
        if step is part:
            return True
        here = nxt
    return False


def _spell(where: list[int | str], data: object = None) -> str:
    text = ""
    here: Any = data
    for number, part in enumerate(where):
        if data is not None:
            try:
                here = here[part]
            except (KeyError, IndexError, TypeError):
                if number != len(where) - 1:
                    continue
        if isinstance(part, int):
            text += f"[{part + 1}]"
        else:
            text += f".{part}" if text else part
    return text


def _nearest(where: list[int | str], model: type[BaseModel], data: object) -> str:
    names = _fields_at(where[:-1], model, data)
    near = difflib.get_close_matches(str(where[-1]), names, n=1, cutoff=0.5)
    if near:
        return f"; the nearest right one is {near[0]}"
    return f"; the keys here are {', '.join(sorted(names))}" if names else ""


def _fields_at(where: list[int | str], annotation: Any, data: Any) -> list[str]:
    """The keys that are right at a place of the file, found by walking the annotations."""
    models = _models(annotation)
    if not where:
        tag = data.get("kind") if isinstance(data, Mapping) else None
        tagged = [m for m in models if _tag(m) == tag] or models
        return [name for m in tagged for name in m.model_fields]
    step, rest = where[0], where[1:]
    try:
        below = data[step]
    except (KeyError, IndexError, TypeError):
        below = None
    for model in models:
        if isinstance(step, str) and step in model.model_fields:
            return _fields_at(rest, model.model_fields[step].annotation, below)
    if models:
        return []
    arguments = typing.get_args(annotation)
    return _fields_at(rest, arguments[-1], below) if arguments else []


def _tag(model: type[BaseModel]) -> object:
    field = model.model_fields.get("kind")
    return typing.get_args(field.annotation)[0] if field is not None else None


def _models(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    origin = typing.get_origin(annotation)
    if origin in (list, dict, tuple, Mapping):
        return []
    return [m for a in typing.get_args(annotation) for m in _models(a)]
