"""What each part's sheet allows, against what a solved circuit asks of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.network import Element, terminal_currents
from benchkit.files.parts import Bipolar, Diode, NMosfet, Part, PMosfet, Resistor, Tvs, Zener
from benchkit.prediction.part_state import PartStates

Floats = NDArray[np.float64]

SOLVED = 1e-4
"""A figure at its rating holds: a leakage beside the working current must not say otherwise."""


@dataclass(frozen=True)
class Rating:
    """One rating of one part against the worst that a scenario asks of it."""

    part: str
    rating: str
    unit: str
    value: float
    limit: float
    margin: float
    holds: bool

    def sentence(self) -> str:
        """What is wrong, where it does not hold."""
        return (
            f"{self.part}: {self.rating} would be {self.value:.4g} {self.unit}, above its rating "
            f"of {self.limit:.4g} {self.unit}"
        )


def rating(part: str, name: str, unit: str, values: Floats | float, limit: float) -> Rating:
    """The largest of ``values`` against ``limit``; what is below zero asks nothing."""
    value = max(float(np.max(values)), 0.0)
    return Rating(part, name, unit, value, limit, limit - value, value <= limit * (1 + SOLVED))


def part_ratings(
    reference: str,
    part: Part,
    nodes: Sequence[str],
    states: PartStates,
    own: Sequence[Element],
    volts: Mapping[str, Floats],
    *,
    lasts: bool,
) -> list[Rating]:
    """Every rating in volts, amperes and watts that the part's sheet prints.

    own: the part's elements (``part_state.own_elements``). lasts: what flows goes on; where a
    fuse ends it soon, ratings of continuous current and power are left to its coordination.
    """
    if isinstance(part, Diode | Tvs):
        limit = part.reverse_voltage_max_V if isinstance(part, Diode) else part.stand_off_V
        name = "reverse voltage" if isinstance(part, Diode) else "stand-off voltage"
        found = [rating(reference, name, "V", -states.voltage_V, limit)]
        if lasts:
            amps, most = states.current_A, part.average_current_max_A
            found.append(rating(reference, "average forward current", "A", amps, most))
        return found
    if isinstance(part, PMosfet | NMosfet):
        polarity = 1 if isinstance(part, NMosfet) else -1
        gate = polarity * (volts[nodes[1]] - volts[nodes[2]])
        across, through = np.abs(states.voltage_V), np.abs(states.current_A)
        back = part.gate_reverse_max_V
        return [
            rating(reference, "drain-source voltage", "V", across, part.drain_source_max_V),
            rating(reference, "gate-source voltage", "V", gate, part.gate_source_max_V),
            rating(reference, "reverse gate-source voltage", "V", -gate, back),
            rating(reference, "drain current", "A", through, part.drain_current_max_A),
        ]
    if isinstance(part, Bipolar):
        return _bipolar(reference, part, nodes, states, own, volts)
    if isinstance(part, Resistor | Zener) and lasts:
        return [rating(reference, "power", "W", states.power_W, part.power_max_W)]
    return []


def _bipolar(
    reference: str, part: Bipolar, nodes: Sequence[str], states: PartStates,
    own: Sequence[Element], volts: Mapping[str, Floats],
) -> list[Rating]:  # fmt: skip
    polarity = 1 if part.kind == "npn" else -1
    across, reverse = polarity * states.voltage_V, polarity * (volts[nodes[2]] - volts[nodes[1]])
    through = polarity * states.current_A
    allowed = part.emitter_base_current_max_A
    if allowed is None:
        strain = rating(reference, "emitter-base voltage", "V", reverse, part.emitter_base_max_V)
    else:
        # Its breakdown is allowed, as long as the current in it is small.
        base = -polarity * terminal_currents(own[0], volts)[1]
        strain = rating(reference, "reverse base current", "A", base, allowed)
    return [
        rating(reference, "collector-emitter voltage", "V", across, part.collector_emitter_max_V),
        strain,
        rating(reference, "collector current", "A", through, part.collector_current_max_A),
    ]
