"""Parts as tables of a stage file: datasheet points as printed, with their conditions."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from benchkit.files.loading import FileModel

Positive = Annotated[float, Field(gt=0)]
Celsius = Annotated[float, Field(ge=-80, le=250)]


def _typ_max(typ: float, most: float | None, what: str) -> None:
    if most is not None and most < typ:
        raise ValueError(f"max_{what} {most:g} must not be below typ_{what} {typ:g}")


class ForwardPoint(FileModel):
    """Forward drop of a junction at a current and junction temperature."""

    current_A: Positive
    typ_V: Annotated[float, Field(gt=0, lt=5)]
    max_V: Annotated[float, Field(gt=0, lt=6)] | None = None
    junction_C: Celsius = 25.0

    @model_validator(mode="after")
    def _ordered(self) -> ForwardPoint:
        _typ_max(self.typ_V, self.max_V, "V")
        return self


class LeakagePoint(FileModel):
    """Reverse current of a junction at a reverse voltage and junction temperature."""

    reverse_V: Positive
    typ_A: Positive
    max_A: Positive | None = None
    junction_C: Celsius = 25.0

    @model_validator(mode="after")
    def _ordered(self) -> LeakagePoint:
        _typ_max(self.typ_A, self.max_A, "A")
        return self


class Diode(FileModel):
    """A rectifier or Schottky diode."""

    kind: Literal["diode"]
    technology: Literal["schottky", "silicon"]
    forward: Annotated[list[ForwardPoint], Field(min_length=2)]
    leakage: list[LeakagePoint] = Field(default_factory=list)
    reverse_voltage_max_V: Positive
    average_current_max_A: Positive
    surge_current_max_A: Positive | None = None
    surge_width_ms: float = 8.3
    """Width of the half-sine that the surge current is printed for: of 60 or of 50 Hz."""
    junction_max_C: Celsius
    junction_to_case_K_per_W: Positive

    @field_validator("surge_width_ms")
    @classmethod
    def _half_sine(cls, width: float) -> float:
        if width not in (8.3, 10.0):
            raise ValueError(f"{width:g} must be 8.3 or 10, the half-sine of 60 or of 50 Hz")
        return width


class OnResistancePoint(FileModel):
    """RDS(on) at a gate voltage (magnitude) and junction temperature."""

    gate_V: Positive
    current_A: Positive
    typ_ohm: Positive
    max_ohm: Positive | None = None
    junction_C: Celsius = 25.0

    @model_validator(mode="after")
    def _ordered(self) -> OnResistancePoint:
        _typ_max(self.typ_ohm, self.max_ohm, "ohm")
        return self


class Threshold(FileModel):
    """Gate threshold window (magnitudes) at a drain current, 25 degrees Celsius."""

    min_V: Positive
    max_V: Positive
    typ_V: Positive | None = None
    current_A: Positive

    @model_validator(mode="after")
    def _ordered(self) -> Threshold:
        middle = self.typ_V if self.typ_V is not None else 0.5 * (self.min_V + self.max_V)
        if not self.min_V <= middle <= self.max_V:
            raise ValueError(
                f"min_V {self.min_V:g}, typ_V {middle:g} and max_V {self.max_V:g} must rise "
                "in that order"
            )
        return self

    @property
    def middle_V(self) -> float:
        """The typical threshold, or the middle of the window where none is printed."""
        return self.typ_V if self.typ_V is not None else 0.5 * (self.min_V + self.max_V)


class PMosfet(FileModel):
    """A P-channel MOSFET with its body diode; voltages are magnitudes, as most sheets print."""

    kind: Literal["p-mosfet"]
    on_resistance: Annotated[list[OnResistancePoint], Field(min_length=2)]
    threshold: Threshold
    body_diode: Annotated[list[ForwardPoint], Field(min_length=1)]
    drain_source_max_V: Positive
    gate_source_max_V: Positive
    drain_current_max_A: Positive
    junction_max_C: Celsius
    junction_to_case_K_per_W: Positive


class Resistor(FileModel):
    """A fixed resistor."""

    kind: Literal["resistor"]
    value_ohm: Positive
    tolerance_percent: Annotated[float, Field(ge=0, le=50)] = 1.0
    tempco_ppm_per_K: float = 0.0
    power_max_W: Positive


Part = Annotated[Diode | PMosfet | Resistor, Field(discriminator="kind")]
