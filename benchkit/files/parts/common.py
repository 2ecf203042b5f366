"""What the tables of all parts share."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from benchkit.files.loading import FileModel

Positive = Annotated[float, Field(gt=0)]
Celsius = Annotated[float, Field(ge=-80, le=250)]


class PartTable(FileModel):
    """What every part's table may hold."""

    role: str | None = None
    """The role of the topology that it fills, where two parts of a kind leave that open."""


class WarmPart(PartTable):
    """A part whose junction is checked."""

    junction_max_C: Celsius
    junction_to_case_K_per_W: Positive | None = None
    """Needed of the part whose case is measured."""
    junction_to_ambient_K_per_W: Positive | None = None
    """On this board; for the other parts, where their junction is to be checked."""


def rising(typ: float, most: float | None, what: str) -> None:
    """ValueError where a printed maximum is below the typical value."""
    if most is not None and most < typ:
        raise ValueError(f"max_{what} {most:g} must not be below typ_{what} {typ:g}")
