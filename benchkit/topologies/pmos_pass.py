"""``pmos-pass``: a P-channel MOSFET in the plus lead, gate tied to the minus lead.

    exposed+ --- drain [P-channel] source --- guarded+      body diode from drain to source
                          gate
                           |
                      (gate resistor)
                           |
    exposed- --------------+--------------- guarded-        the minus lead runs straight through

Right way round the body diode conducts first; the source rises to the supply voltage less its
drop, which drives the gate by that much, and the channel shorts the body diode out. The wrong way
round the gate is above the source and the body diode blocks. The gate sees the whole supply
voltage, so its rating bounds the supply.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Literal

from benchkit.circuit import GROUND, Resistor
from benchkit.circuit.network import Element
from benchkit.parts.diode import DiodeLaw
from benchkit.topologies.base import EXPOSED, GUARDED, Floats, Law, MosfetLaws, mosfet


class PmosPass:
    """See the module."""

    name = "pmos-pass"
    kinds: Mapping[str, str] = {"pass": "p-mosfet", "gate": "resistor"}
    optional: Sequence[str] = ("gate",)
    main = "pass"
    conducts: Literal["junction", "channel"] = "channel"
    control: tuple[str, str] | None = ("gate", GUARDED)

    def elements(
        self, names: Mapping[str, str], laws: Mapping[str, Law], junction_C: Floats | float
    ) -> list[Element]:
        """The MOSFET and its gate resistor (100 ohm stands in where none is fitted)."""
        reference = names["pass"]
        law = laws[reference]
        assert isinstance(law, MosfetLaws)
        ohms = laws[names["gate"]] if "gate" in names else 100.0
        assert not isinstance(ohms, MosfetLaws | DiodeLaw)
        return [
            *mosfet(reference, (EXPOSED, "gate", GUARDED), law, junction_C, polarity=-1),
            Resistor(names.get("gate", "gate-lead"), ("gate", GROUND), ohms),
        ]
