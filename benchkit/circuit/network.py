"""A network: named elements between named nodes, with one node as the reference."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple, Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

GROUND = "0"
"""The reference node, at zero volts."""


class Branch(NamedTuple):
    """One current through an element: from terminal ``first`` to terminal ``second``.

    slopes: (plus, minus, siemens) for each pair of terminals whose voltage controls it. inner_V:
    a voltage inside the law, above those at its terminals, whose last bits are seen in the current
    too. Arrays have shape (batch,) or broadcast to it.
    """

    first: int
    second: int
    amps: Floats
    slopes: tuple[tuple[int, int, Floats], ...]
    inner_V: Floats | float = 0.0


class Element(Protocol):
    """A part of a network, a frozen dataclass whose arrays all run over the batch."""

    @property
    def name(self) -> str:
        """The part's reference, unique in its network."""

    @property
    def nodes(self) -> tuple[str, ...]:
        """Where its terminals are connected."""

    def branches(self, volts: Floats) -> list[Branch]:
        """Its currents at terminal voltages of shape (terminals, batch)."""


@dataclass(frozen=True)
class Network:
    """Elements in a fixed order, and the nodes that ideal sources hold at a voltage to ground."""

    elements: tuple[Element, ...]
    held: Mapping[str, Floats | float]

    def node_names(self) -> list[str]:
        """Every node but ground, in order of first use, held ones included."""
        names: dict[str, None] = {}
        for element in self.elements:
            for node in element.nodes:
                if node != GROUND:
                    names[node] = None
        return list(names)


def network(
    elements: Sequence[Element], held: Mapping[str, Floats | float] | None = None
) -> Network:
    """Make a network, refusing two elements of one name (ValueError)."""
    names = [element.name for element in elements]
    twice = {name for name in names if names.count(name) > 1}
    if twice:
        raise ValueError(f"two elements are called {', '.join(sorted(twice))}")
    return Network(tuple(elements), dict(held or {}))


def terminal_currents(element: Element, volts: Mapping[str, Floats]) -> list[Floats]:
    """Current into every terminal of an element, amperes, shape (batch,) each."""
    at = np.stack([volts[node] for node in element.nodes])
    into = [np.zeros(at.shape[1]) for _ in element.nodes]
    for branch in element.branches(at):
        into[branch.first] = into[branch.first] + branch.amps
        into[branch.second] = into[branch.second] - branch.amps
    return into
