"""A network: named elements between named nodes, with one node as the reference."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

GROUND = "0"
"""The reference node, at zero volts."""


class Element(Protocol):
    """A part of a network.

    An element with n terminals takes their voltages, shape (batch, n), and gives the currents
    that flow from the nodes into it, shape (batch, n), and their slopes, (batch, n, n).
    """

    @property
    def name(self) -> str:
        """The part's reference, unique in its network."""

    @property
    def nodes(self) -> tuple[str, ...]:
        """Where its terminals are connected."""

    def currents(self, volts: Floats) -> tuple[Floats, Floats]:
        """Currents into the element and their Jacobian."""


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
