"""What a stage file asks for beside sweep and soak: the tables of its trials."""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Literal

from pydantic import Field, field_validator

from benchkit.files.loading import FileModel

Positive = Annotated[float, Field(gt=0)]

AUTOMOTIVE_DWELL_S = 60.0
"""Reversed voltage for 60 s: ISO 16750-2, -14 V in 12 V systems and -28 V in 24 V ones (from
memory: look the clause up before quoting it)."""


class Reverse(FileModel):
    """[reverse]: the trial in the wrong direction, supply leads crossed at the exposed port."""

    voltage_V: Positive | None = None
    """The full reverse voltage; the stage's highest supply voltage unless given."""
    steps: Annotated[int, Field(ge=1, le=20)] = 4
    """Rungs of the ladder up to it."""
    current_limit_A: Annotated[float, Field(gt=0, le=1)] = 0.1
    dwell_s: Annotated[float, Field(ge=0, le=600)] | Literal["automotive"] = 5.0
    """How long the full reverse voltage stays; "automotive" is AUTOMOTIVE_DWELL_S."""

    @property
    def dwell(self) -> float:
        """In seconds."""
        return AUTOMOTIVE_DWELL_S if self.dwell_s == "automotive" else float(self.dwell_s)


class SupplySweep(FileModel):
    """[supply_sweep]: drop and gate voltage against supply voltage, at one current, downwards."""

    voltages_V: Annotated[list[Positive], Field(min_length=4, max_length=200)]
    """Rising; they should begin below where the stage switches on."""
    current_A: Positive | None = None
    """The stage's nominal current unless given."""

    @field_validator("voltages_V")
    @classmethod
    def _rising(cls, values: list[float]) -> list[float]:
        for low, high in pairwise(values):
            if high <= low:
                raise ValueError(f"{high:g} follows {low:g}: the voltages must rise")
        return values


class FusedTrial(FileModel):
    """[fused_trial]: the wrong way round with the full current, which blows the stage's fuse."""

    current_A: Annotated[float, Field(gt=0, le=500)]
    """The current limit of the supply: what it can drive through fuse and clamp."""
    voltage_V: Positive | None = None
    """The stage's highest supply voltage unless given."""


BatteryScenario = Literal[
    "reversed-battery-off", "reversed-battery-on", "back-feed", "flat-battery"
]  # fmt: skip
BATTERY_SCENARIOS: tuple[BatteryScenario, ...] = (
    "reversed-battery-off", "reversed-battery-on", "flat-battery", "back-feed",
)  # fmt: skip


class BatteryTrial(FileModel):
    """[battery_trial]: a battery's stand-in at the exposed port, either way round."""

    scenarios: Annotated[list[BatteryScenario], Field(min_length=1)] = Field(
        default_factory=lambda: list(BATTERY_SCENARIOS)
    )
    current_limit_A: Annotated[float, Field(gt=0, le=1)] = 0.1
    """Of the stand-in; the supply that stands for the equipment gets a little less, so that the
    stand-in is never driven the wrong way."""
    dwell_s: Annotated[float, Field(ge=0, le=600)] = 2.0
    """How long each state stays."""
