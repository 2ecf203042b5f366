"""MOSFETs as their datasheets print them."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from benchkit.files.loading import FileModel
from benchkit.files.parts.common import Celsius, Positive, WarmPart, rising
from benchkit.files.parts.junctions import ForwardPoint, LeakagePoint, VoltageWindow


class OnResistancePoint(FileModel):
    """RDS(on) at a gate voltage (magnitude) and junction temperature."""

    gate_V: Positive
    current_A: Positive
    typ_ohm: Positive
    max_ohm: Positive | None = None
    junction_C: Celsius = 25.0

    @model_validator(mode="after")
    def _ordered(self) -> OnResistancePoint:
        rising(self.typ_ohm, self.max_ohm, "ohm")
        return self


class Threshold(VoltageWindow):
    """Gate threshold window (magnitudes) at a drain current, 25 degrees Celsius."""


class Mosfet(WarmPart):
    """A MOSFET with its body diode; voltages are magnitudes, as most sheets print."""

    on_resistance: Annotated[list[OnResistancePoint], Field(min_length=2)]
    threshold: Threshold
    body_diode: Annotated[list[ForwardPoint], Field(min_length=1)]
    leakage: list[LeakagePoint] = Field(default_factory=list)
    """IDSS: current from drain to source at a drain voltage, the gate at its source."""
    drain_source_max_V: Positive
    gate_source_max_V: Positive
    """The way that turns it on, and the other way too unless the next key says less."""
    gate_source_reverse_max_V: Positive | None = None
    drain_current_max_A: Positive

    @property
    def gate_reverse_max_V(self) -> float:
        """What the gate may stand the way that turns the channel off."""
        other = self.gate_source_reverse_max_V
        return self.gate_source_max_V if other is None else other


class PMosfet(Mosfet):
    """A P-channel MOSFET."""

    kind: Literal["p-mosfet"]


class NMosfet(Mosfet):
    """An N-channel MOSFET."""

    kind: Literal["n-mosfet"]
