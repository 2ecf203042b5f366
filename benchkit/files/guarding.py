"""The guard's thresholds: what a bench file may set otherwise, and why each is what it is."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field, model_validator

from benchkit.files.loading import FileModel


class Thresholds(FileModel):
    """[guard]: what the guard refuses and trips on, beside the limits that stage and step give."""

    residual_V: Annotated[float, Field(ge=0.05, le=0.5)] = 0.5
    """Above this a port is not dead: no lead is touched, nothing counts as off. Below a junction's
    drop, so that nothing conducts by it (common practice, no source)."""
    off_A: Annotated[float, Field(ge=0.001, le=0.1)] = 0.01
    """More than this through the exposed port is not an output that is off; a few times what a
    shunt of 10 milliohms resolves."""
    discharge_s: Annotated[float, Field(ge=0.5, le=120)] = 5.0
    """How long an output is given to fall below residual_V: five time constants of the slowest
    usual output capacitor and bleeder (judgement)."""
    rest_K: Annotated[float, Field(ge=2, le=50)] = 10.0
    """Case and ambient may differ by this much before a run: a board fresh from the hand."""
    sensor_min_C: Annotated[float, Field(ge=-80, le=20)] = -45.0
    """A sensor that reads colder than any climate chamber in use is broken (judgement)."""
    sensor_max_C: Annotated[float, Field(ge=40, le=150)] = 90.0
    """Or warmer than any part at rest (judgement)."""
    guarded_min_V: Annotated[float, Field(ge=-1.2, le=-0.1)] = -0.6
    """The guarded port may not be driven the wrong way: what equipment stands for sure is no more
    than a forward drop (common practice, no source)."""
    case_rise_max_K_per_s: Annotated[float, Field(ge=0.5, le=50)] = 8.0
    """A case that is sound warms over tens of seconds; faster, something burns (judgement)."""
    frozen_s: Annotated[float, Field(ge=30, le=3600)] = 300.0
    """A case that reads the very same for so long while the supply gives more than a watt has a
    dead sensor: a live one has noise, and ambient drifts (judgement)."""
    apart_V: Annotated[float, Field(ge=0.05, le=2)] = 0.5
    """How far a supply's own voltage may be from the meter's at its port: leads drop some."""
    apart_percent: Annotated[float, Field(ge=0, le=20)] = 5.0
    """The same, in percent of the step's voltage, added to apart_V."""
    mesh_V: Annotated[float, Field(ge=0.001, le=0.5)] = 0.03
    """Exposed less guarded voltage must equal the drop within this: Kirchhoff's voltage law, and
    the offsets of three channels on their largest ranges."""
    mesh_percent: Annotated[float, Field(ge=0, le=5)] = 0.5
    """The same, in percent of the exposed voltage, added to mesh_V."""

    @model_validator(mode="after")
    def _ordered(self) -> Thresholds:
        if not self.sensor_min_C < self.sensor_max_C:
            raise ValueError(
                f"sensor_min_C {self.sensor_min_C:g} must be below sensor_max_C "
                f"{self.sensor_max_C:g}"
            )
        return self
