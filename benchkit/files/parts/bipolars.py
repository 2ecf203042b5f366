"""Bipolar transistors as their datasheets print them; voltages and currents are magnitudes."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from benchkit.files.loading import FileModel
from benchkit.files.parts.common import Celsius, Positive, WarmPart, rising


class Gain(FileModel):
    """Window of the current gain hFE at a collector current, 25 degrees Celsius."""

    min: Annotated[float, Field(ge=1)]
    max: Annotated[float, Field(ge=1, le=1e5)]
    typ: Annotated[float, Field(ge=1)] | None = None
    current_A: Positive

    @model_validator(mode="after")
    def _ordered(self) -> Gain:
        if not self.min <= self.middle <= self.max:
            raise ValueError(
                f"min {self.min:g}, typ {self.middle:g} and max {self.max:g} must rise in that "
                "order"
            )
        return self

    @property
    def middle(self) -> float:
        """The typical gain, or the geometric middle of the window where none is printed."""
        middle: float = (self.min * self.max) ** 0.5
        return self.typ if self.typ is not None else middle


class BaseEmitterPoint(FileModel):
    """VBE at a collector current, active, 25 degrees Celsius."""

    current_A: Positive
    typ_V: Annotated[float, Field(gt=0, lt=2)]
    max_V: Annotated[float, Field(gt=0, lt=3)] | None = None

    @model_validator(mode="after")
    def _ordered(self) -> BaseEmitterPoint:
        rising(self.typ_V, self.max_V, "V")
        return self


class Saturation(FileModel):
    """VCE(sat) at a collector and a base current, 25 degrees Celsius."""

    collector_A: Positive
    base_A: Positive
    typ_V: Annotated[float, Field(gt=0, lt=5)] | None = None
    max_V: Annotated[float, Field(gt=0, lt=5)] | None = None

    @model_validator(mode="after")
    def _ordered(self) -> Saturation:
        if self.typ_V is None and self.max_V is None:
            raise ValueError("typ_V or max_V must be given, or both")
        if self.typ_V is not None:
            rising(self.typ_V, self.max_V, "V")
        return self


class BaseEmitterBreakdown(FileModel):
    """Where the base-emitter junction breaks down, 25 degrees Celsius."""

    typ_V: Positive
    current_A: Positive


class CollectorLeakage(FileModel):
    """ICBO: collector to base with the emitter open."""

    collector_base_V: Positive
    typ_A: Positive | None = None
    max_A: Positive | None = None
    junction_C: Celsius = 25.0

    @model_validator(mode="after")
    def _ordered(self) -> CollectorLeakage:
        if self.typ_A is None and self.max_A is None:
            raise ValueError("typ_A or max_A must be given, or both")
        if self.typ_A is not None:
            rising(self.typ_A, self.max_A, "A")
        return self


class Bipolar(WarmPart):
    """An NPN or PNP transistor."""

    kind: Literal["npn", "pnp"]
    gain: Gain
    base_emitter: Annotated[list[BaseEmitterPoint], Field(min_length=1, max_length=2)]
    saturation: Saturation
    breakdown: BaseEmitterBreakdown | None = None
    leakage: CollectorLeakage | None = None
    collector_emitter_max_V: Positive
    emitter_base_max_V: Positive
    emitter_base_current_max_A: Positive | None = None
    """A reverse base current that sheet or designer allows; the voltage may then be exceeded."""
    collector_current_max_A: Positive
