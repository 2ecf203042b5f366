"""Diodes, Zeners and transient suppressors as their datasheets print them."""

from __future__ import annotations

from typing import Annotated, Literal, Self

from pydantic import Field, field_validator, model_validator

from benchkit.files.loading import FileModel
from benchkit.files.parts.common import Celsius, Positive, WarmPart, rising


class ForwardPoint(FileModel):
    """Forward drop of a junction at a current and junction temperature."""

    current_A: Positive
    typ_V: Annotated[float, Field(gt=0, lt=5)]
    max_V: Annotated[float, Field(gt=0, lt=6)] | None = None
    junction_C: Celsius = 25.0

    @model_validator(mode="after")
    def _ordered(self) -> ForwardPoint:
        rising(self.typ_V, self.max_V, "V")
        return self


class LeakagePoint(FileModel):
    """Reverse current of a junction at a reverse voltage and junction temperature."""

    reverse_V: Positive
    typ_A: Positive
    max_A: Positive | None = None
    junction_C: Celsius = 25.0

    @model_validator(mode="after")
    def _ordered(self) -> LeakagePoint:
        rising(self.typ_A, self.max_A, "A")
        return self


class VoltageWindow(FileModel):
    """A voltage between limits at a test current, 25 degrees Celsius."""

    min_V: Positive
    max_V: Positive
    typ_V: Positive | None = None
    current_A: Positive

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        if not self.min_V <= self.middle_V <= self.max_V:
            raise ValueError(
                f"min_V {self.min_V:g}, typ_V {self.middle_V:g} and max_V {self.max_V:g} must "
                "rise in that order"
            )
        return self

    @property
    def middle_V(self) -> float:
        """The typical voltage, or the middle of the window where none is printed."""
        return self.typ_V if self.typ_V is not None else 0.5 * (self.min_V + self.max_V)


class SurgePart(WarmPart):
    """A junction with a rating for one forward half-sine of current."""

    surge_current_max_A: Positive | None = None
    surge_width_ms: float = 8.3
    """Width of the half-sine that the surge current is printed for: of 60 or of 50 Hz."""
    surge_I2t_A2s: Positive | None = None
    """Where it is printed; else it follows from the two above."""

    @field_validator("surge_width_ms")
    @classmethod
    def _half_sine(cls, width: float) -> float:
        if width not in (8.3, 10.0):
            raise ValueError(f"{width:g} must be 8.3 or 10, the half-sine of 60 or of 50 Hz")
        return width

    @property
    def surge_A2s(self) -> float | None:
        """The I2t that it stands once, in A2s: printed, or that of its surge's half-sine."""
        if self.surge_I2t_A2s is not None or self.surge_current_max_A is None:
            return self.surge_I2t_A2s
        return self.surge_current_max_A**2 * self.surge_width_ms * 1e-3 / 2


class Diode(SurgePart):
    """A rectifier or Schottky diode."""

    kind: Literal["diode"]
    technology: Literal["schottky", "silicon"]
    forward: Annotated[list[ForwardPoint], Field(min_length=2)]
    leakage: list[LeakagePoint] = Field(default_factory=list)
    reverse_voltage_max_V: Positive
    average_current_max_A: Positive


class Zener(WarmPart):
    """A Zener diode."""

    kind: Literal["zener"]
    voltage: VoltageWindow
    dynamic_ohm: Positive
    """ZZT: at the test current of ``voltage``."""
    knee_ohm: Positive | None = None
    """ZZK, at ``knee_current_A``."""
    knee_current_A: Positive | None = None
    tempco_V_per_K: float | None = None
    forward: list[ForwardPoint] = Field(default_factory=list)
    leakage: list[LeakagePoint] = Field(default_factory=list)
    power_max_W: Positive


class Tvs(SurgePart):
    """A unidirectional transient voltage suppressor."""

    kind: Literal["tvs"]
    forward: Annotated[list[ForwardPoint], Field(min_length=1)]
    leakage: list[LeakagePoint] = Field(default_factory=list)
    stand_off_V: Positive
    breakdown: VoltageWindow
    clamping_V: Positive | None = None
    clamping_A: Positive | None = None
    tempco_V_per_K: float | None = None
    average_current_max_A: Positive
