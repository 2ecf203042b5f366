"""``series-diode``: a Schottky or rectifier in the plus lead.

    exposed+ ---|>|--- guarded+        anode to the exposed side
    exposed- --------- guarded-        the minus lead runs straight through

Right way round the whole working current flows through the diode, and its drop is lost all the
time. The wrong way round it blocks: it must stand the reversed voltage, plus whatever the guarded
side still holds.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Literal

from benchkit.circuit import Junction
from benchkit.circuit.network import Element
from benchkit.parts.diode import DiodeLaw
from benchkit.topologies.base import EXPOSED, GUARDED, Floats, Law


class SeriesDiode:
    """See the module."""

    name = "series-diode"
    kinds: Mapping[str, str] = {"diode": "diode"}
    optional: Sequence[str] = ()
    main = "diode"
    conducts: Literal["junction", "channel"] = "junction"
    control: tuple[str, str] | None = None

    def elements(
        self, names: Mapping[str, str], laws: Mapping[str, Law], junction_C: Floats | float
    ) -> list[Element]:
        """One junction."""
        law = laws[names["diode"]]
        assert isinstance(law, DiodeLaw)
        return [Junction(names["diode"], (EXPOSED, GUARDED), law, junction_C)]
