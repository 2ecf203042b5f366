"""Parts as tables of a stage file: datasheet points as printed, with their conditions."""

from typing import Annotated

from pydantic import Field

from benchkit.files.parts.bipolars import Bipolar
from benchkit.files.parts.junctions import (
    Diode,
    ForwardPoint,
    LeakagePoint,
    Tvs,
    VoltageWindow,
    Zener,
)
from benchkit.files.parts.mosfets import Mosfet, NMosfet, OnResistancePoint, PMosfet
from benchkit.files.parts.passives import Fuse, Lead, Resistor

Part = Annotated[
    Diode | Zener | Tvs | PMosfet | NMosfet | Bipolar | Resistor | Lead | Fuse,
    Field(discriminator="kind"),
]

__all__ = [
    "Bipolar", "Diode", "ForwardPoint", "Fuse", "Lead", "LeakagePoint", "Mosfet", "NMosfet",
    "OnResistancePoint", "PMosfet", "Part", "Resistor", "Tvs", "VoltageWindow", "Zener",
]  # fmt: skip
