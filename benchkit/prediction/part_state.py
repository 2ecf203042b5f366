"""What one part of a solved circuit stands: voltage across it, current through it, its power."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.network import Element, terminal_currents

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class PartStates:
    """Arrays of shape (batch,).

    voltage_V: from the part's first terminal to its last (anode to cathode, drain to source,
    collector to emitter). current_A: into its first terminal. power_W: what it turns to heat.
    """

    voltage_V: Floats
    current_A: Floats
    power_W: Floats


def own_elements(elements: Iterable[Element], reference: str) -> list[Element]:
    """The elements that make up one part."""
    return [e for e in elements if e.name == reference or e.name.startswith(f"{reference}.")]


def part_states(
    elements: Iterable[Element],
    reference: str,
    nodes: Sequence[str],
    volts: Mapping[str, Floats],
) -> PartStates:
    """The part ``reference`` between its nodes, at node voltages of shape (batch,) each."""
    own = own_elements(elements, reference)
    current, power = np.zeros(volts[nodes[0]].shape), np.zeros(volts[nodes[0]].shape)
    first = nodes[0]
    for element in own:
        into = terminal_currents(element, volts)
        for node, amps in zip(element.nodes, into, strict=True):
            power = power + volts[node] * amps
            # A three-terminal part's first terminal is behind its series resistance.
            if node == first and len(element.nodes) == 2:
                current = current + amps
    return PartStates(volts[nodes[0]] - volts[nodes[-1]], current, power)
