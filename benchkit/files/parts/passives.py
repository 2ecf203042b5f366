"""Resistors, leads and fuses as their datasheets print them."""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from benchkit.files.loading import FileModel
from benchkit.files.parts.common import PartTable, Positive

Tempco = Annotated[float, Field(ge=-4000, le=9000)]
"""Within these a linear law stays positive from -80 to 250 degrees Celsius."""
COPPER_PPM_PER_K = 3930.0
"""Of copper's resistance at 20 degrees Celsius (handbook value, from memory)."""


class Resistor(PartTable):
    """A fixed resistor."""

    kind: Literal["resistor"]
    value_ohm: Positive
    tolerance_percent: Annotated[float, Field(ge=0, le=50)] = 1.0
    tempco_ppm_per_K: Tempco = 0.0
    power_max_W: Positive


class Lead(PartTable):
    """A lead, track or contact in the way of the current, there and back if both count."""

    kind: Literal["lead"]
    value_ohm: Positive
    """At 20 degrees Celsius, as tables of copper wire print it."""
    tolerance_percent: Annotated[float, Field(ge=0, le=50)] = 10.0
    tempco_ppm_per_K: Tempco = COPPER_PPM_PER_K


class MeltingPoint(FileModel):
    """One point of a fuse's average time-current curve."""

    current_A: Positive
    time_s: Positive


class Fuse(PartTable):
    """A fuse; its rating means what its standard says."""

    kind: Literal["fuse"]
    standard: Literal["ul-248-14", "iec-60127-2"]
    rated_current_A: Positive
    rated_voltage_V: Positive
    """For direct current, where the sheet tells it from alternating."""
    breaking_A: Positive
    """Breaking capacity at that voltage."""
    cold_ohm: Positive
    cold_tolerance_percent: Annotated[float, Field(ge=0, le=50)] = 15.0
    drop_V: Positive | None = None
    """At the rated current, warm: says how its resistance rises."""
    melting_A2s: Positive
    clearing_A2s: Positive | None = None
    """Melting and arcing together."""
    points: Annotated[list[MeltingPoint], Field(max_length=50)] = Field(default_factory=list)
    spread_percent: Annotated[float, Field(ge=0, le=90)] | None = None
    """Of the melting I2t between parts, either way."""

    @field_validator("points")
    @classmethod
    def _falling(cls, points: list[MeltingPoint]) -> list[MeltingPoint]:
        ordered = sorted(points, key=lambda point: point.current_A)
        for low, high in pairwise(ordered):
            if high.current_A == low.current_A or high.time_s >= low.time_s:
                raise ValueError(
                    f"{high.time_s:g} s at {high.current_A:g} A does not fit {low.time_s:g} s at "
                    f"{low.current_A:g} A: a fuse melts sooner at a larger current"
                )
        return ordered

    @model_validator(mode="after")
    def _ordered(self) -> Fuse:
        if self.clearing_A2s is not None and self.clearing_A2s < self.melting_A2s:
            raise ValueError(
                f"clearing_A2s {self.clearing_A2s:g} must not be below melting_A2s "
                f"{self.melting_A2s:g}: it is melting and arcing together"
            )
        return self
