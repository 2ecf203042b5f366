"""A part's law between its nodes: the elements that a network needs of it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import Bipolar, Channel, FuseLink, Junction, Resistor
from benchkit.circuit.network import Element
from benchkit.parts.bipolar import BipolarLaw
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.fuse import FuseLaw
from benchkit.parts.mosfet import MosfetLaws
from benchkit.parts.resistor import ResistorLaw

Floats = NDArray[np.float64]

Law = DiodeLaw | MosfetLaws | BipolarLaw | ResistorLaw | FuseLaw


def placed(
    reference: str, kind: str, nodes: Sequence[str], law: Law, junction_C: Floats | float
) -> list[Element]:
    """The elements of one part; nodes in the order of ``topologies.base.TERMINALS``.

    The first is called as the part; a MOSFET's others ``Q1.series`` and ``Q1.body``, behind the
    inner node ``Q1.drain``, and a bipolar transistor's ``Q2.series``, behind ``Q2.collector``.
    """
    if isinstance(law, DiodeLaw):
        anode, cathode = nodes
        return [Junction(reference, (anode, cathode), law.at(junction_C))]
    if isinstance(law, MosfetLaws):
        drain, gate, source = nodes
        inside, polarity = f"{reference}.drain", 1 if kind == "n-mosfet" else -1
        at = law.at(junction_C)
        body = (source, drain) if polarity > 0 else (drain, source)
        return [
            Channel(reference, (inside, gate, source), at.channel, polarity),
            Resistor(f"{reference}.series", (drain, inside), at.series_ohm),
            Junction(f"{reference}.body", body, at.body),
        ]
    if isinstance(law, BipolarLaw):
        collector, base, emitter = nodes
        inside = f"{reference}.collector"
        bipolar = law.at(junction_C)
        return [
            Bipolar(reference, (inside, base, emitter), bipolar, 1 if kind == "npn" else -1),
            Resistor(f"{reference}.series", (collector, inside), bipolar.collector_ohm),
        ]
    first, second = nodes
    if isinstance(law, FuseLaw):
        return [FuseLink(reference, (first, second), law.at(junction_C))]
    return [Resistor(reference, (first, second), law.at(junction_C).ohms)]
