"""What a topology file gives: how its parts are wired between the exposed and the guarded port.

Every topology uses the same node names, so that sources, loads and meters know where to go:
``exposed+``, ``exposed-``, ``guarded+`` and ``guarded-``. A topology that breaks only the plus
lead makes both minus nodes ground.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import GROUND
from benchkit.circuit.network import Element
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.mosfet import ChannelLaw

Floats = NDArray[np.float64]

EXPOSED, GUARDED = "exposed+", "guarded+"


@dataclass(frozen=True)
class MosfetLaws:
    """Channel and body diode of one part."""

    channel: ChannelLaw
    body: DiodeLaw


Law = DiodeLaw | MosfetLaws | Floats | float
"""A diode's law, a MOSFET's laws, or a resistor's ohms."""


class Topology(Protocol):
    """One way to wire a stage."""

    name: str
    kinds: Mapping[str, str]
    """The kind of part each role needs."""
    optional: Sequence[str]
    """Roles that may be left out."""
    main: str
    """The role whose part carries the working current and gets warm."""
    conducts: Literal["junction", "channel"]
    """What the drop of a good board looks like."""
    control: tuple[str, str] | None
    """Nodes between which the gate voltage stands, gate first, or None."""

    def elements(
        self, names: Mapping[str, str], laws: Mapping[str, Law], junction_C: Floats | float
    ) -> list[Element]:
        """The stage's elements; ``names`` gives the reference that fills each role."""


def mosfet(
    reference: str, nodes: tuple[str, str, str], laws: MosfetLaws, junction_C: Floats | float,
    polarity: int,
) -> list[Element]:  # fmt: skip
    """A MOSFET as its channel behind its series resistance, and its body diode.

    nodes: drain, gate, source. The elements are called ``Q1``, ``Q1.series`` and ``Q1.body``.
    """
    from benchkit.circuit import Channel, Junction, Resistor

    drain, gate, source = nodes
    inside = f"{reference}.drain"
    anode, cathode = (source, drain) if polarity > 0 else (drain, source)
    return [
        Channel(reference, (inside, gate, source), laws.channel, junction_C, polarity),
        Resistor(f"{reference}.series", (drain, inside), laws.channel.series(junction_C)),
        Junction(f"{reference}.body", (anode, cathode), laws.body, junction_C),
    ]


__all__ = [
    "EXPOSED", "GROUND", "GUARDED", "Floats", "Law", "MosfetLaws", "Topology", "mosfet",
]  # fmt: skip
