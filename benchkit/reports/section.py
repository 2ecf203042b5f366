"""A section of a run's report on one part of it: words, a picture, tables, a caution."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field


@dataclass(frozen=True)
class Table:
    """heads: of its columns. key: what is said
    below it. title: "" where the section's own is enough."""

    title: str
    heads: Sequence[str]
    rows: Sequence[Sequence[str]]
    key: str = ""
    words: int = 1
    """How many columns, from the first, hold words."""


@dataclass(frozen=True)
class Section:
    """figure: SVG, "" where there is none. All else is plain text."""

    anchor: str
    title: str
    sentences: Sequence[str]
    figure: str = ""
    tables: Sequence[Table] = field(default_factory=list)
    caution: str = ""
