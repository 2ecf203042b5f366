"""What is at the board's ports at one moment, and the elements that it brings into the network.

The shunt is in the exposed plus lead, common to everything that is connected there and whichever
way round; each source brings its own lead along.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import Emf, Resistor, Solution
from benchkit.circuit.network import Element
from benchkit.harness import Harness, Source
from benchkit.topologies.base import Ports
from instruments.simulated.terminals import (
    BATTERY_EDGES,
    SUPPLY_EDGES,
    SUPPLY_OHM,
    LoadInput,
    SupplyOutput,
)

Floats = NDArray[np.float64]

OFF_OHM = 50.0
"""What discharges the output of a supply that is off."""
METER_OHM = 1e7
"""Across a port with nothing connected to it."""
CONTACTS_OHM = 0.02
"""Of the relays that, both closed, short what is between them."""
RAIL, BATTERY = "shunt.rail", "battery.plus"


class Feed(NamedTuple):
    """What one source holds, and the lead from its terminals."""

    emf_V: float
    limit_A: float
    on: bool
    lead_ohm: float
    bleeder_ohm: float | None = None
    """Across its own terminals."""


class Hookup(NamedTuple):
    """Who is at which port, and what sources and load hold."""

    harness: Harness
    shorted: bool
    """Both polarity relays are closed."""
    feeds: Mapping[Source, Feed]
    load_mode: str
    load_value: float
    drawing: bool
    load_conducts_back: bool
    shunt_ohm: float

    @property
    def folded(self) -> bool:
        """Whether the shunt is counted with the lead of the one source that is there: a node less
        to solve."""
        exposed = self.harness.exposed
        return len(exposed) == 1 and exposed != ("load",) and not self.shorted

    def behind_ohm(self, source: Source) -> float:
        """From a connected source's terminals to the port, or to the shunt where that is apart."""
        at_exposed = source in self.harness.exposed
        shunt = self.shunt_ohm if self.folded and at_exposed else 0.0
        return self.feeds[source].lead_ohm + shunt

    def same_switches(self, other: Hookup) -> bool:
        """Nothing was switched, set or connected otherwise between the two: only the load moved,
        or an output runs down, so that the operating point is near."""
        if (self.harness, self.shorted) != (other.harness, other.shorted):
            return False
        for source, _ in self.harness.sources():
            mine, others = self.feeds[source], other.feeds[source]
            if mine.on != others.on or (mine.on and mine.emf_V != others.emf_V):
                return False
        return True


def around(hookup: Hookup, ports: Ports, amps: Floats) -> list[Element]:
    """Everything at the board's terminals; ``amps`` is what the load draws by now."""
    harness = hookup.harness
    exposed = (ports.exposed_plus, ports.exposed_minus)
    guarded = (ports.guarded_plus, ports.guarded_minus)
    elements: list[Element] = []
    if not harness.exposed:
        elements.append(Resistor("exposed.meter", exposed, METER_OHM))
    if not harness.guarded:
        elements.append(Resistor("guarded.meter", guarded, METER_OHM))
    if (harness.exposed or hookup.shorted) and not hookup.folded:
        elements.append(Resistor("shunt", (exposed[0], RAIL), hookup.shunt_ohm))
        exposed = (RAIL, exposed[1])
    if hookup.shorted:
        elements.append(Resistor("relays", exposed, CONTACTS_OHM))
    for source, port in harness.sources():
        nodes = guarded if port == "guarded" else exposed[::-1] if harness.crossed else exposed
        elements += _supply(hookup, nodes) if source == "supply" else _battery(hookup, nodes)
    if "load" in harness.exposed or "load" in harness.guarded:
        elements.append(_load(hookup, exposed if "load" in harness.exposed else guarded, amps))
    if harness.bleeder_ohm is not None:
        elements.append(Resistor("bleeder", guarded, harness.bleeder_ohm))
    return elements


def _supply(hookup: Hookup, nodes: tuple[str, str]) -> list[Element]:
    """Plus first; discharged by a resistor where its regulator does not work."""
    feed, behind = hookup.feeds["supply"], hookup.behind_ohm("supply")
    if not (feed.on and feed.emf_V > 0):
        return [Emf("supply", nodes, feed.emf_V, OFF_OHM + behind)]
    ohms = SUPPLY_OHM + behind
    return [SupplyOutput("supply", nodes, feed.emf_V, feed.limit_A, ohms, *SUPPLY_EDGES)]


def _battery(hookup: Hookup, nodes: tuple[str, str]) -> list[Element]:
    """Plus first. Off, it gives what its output still holds; then only its bleeder is left."""
    feed = hookup.feeds["battery"]
    own = (BATTERY, nodes[1])
    elements: list[Element] = [
        Resistor("battery.lead", (BATTERY, nodes[0]), hookup.behind_ohm("battery"))
    ]
    if feed.bleeder_ohm is not None:
        elements.append(Resistor("battery.bleeder", own, feed.bleeder_ohm))
    if feed.emf_V > 0:
        output = SupplyOutput("battery", own, feed.emf_V, feed.limit_A, SUPPLY_OHM, *BATTERY_EDGES)
        elements.append(output)
    return elements


def _load(hookup: Hookup, nodes: tuple[str, str], amps: Floats) -> Element:
    """Plus first."""
    back = hookup.load_conducts_back
    if hookup.drawing and hookup.load_mode != "CURR":
        return LoadInput("load", nodes, hookup.load_mode, hookup.load_value, back)
    return LoadInput("load", nodes, "CURR", amps, back)


def terminals(hookup: Hookup, ports: Ports, solution: Solution) -> dict[str, Floats]:
    """What sources, load and shunt see. Sources: volts as they see them, amperes they give; the
    exposed current flows into the exposed plus terminal, whoever it comes from."""
    harness, volts, currents = hookup.harness, solution.volts, solution.currents
    exposed = solution.between(ports.exposed_plus, ports.exposed_minus)
    guarded = solution.between(ports.guarded_plus, ports.guarded_minus)
    none = np.zeros(exposed.shape)
    rail = volts[RAIL] - volts[ports.exposed_minus] if RAIL in volts else exposed
    found = {
        "exposed_voltage": exposed, "guarded_voltage": guarded, "drop": exposed - guarded,
        "load_voltage": none, "load_current": currents.get("load", none),
        "exposed_current": -currents["shunt"] if "shunt" in currents else none,
    }  # fmt: skip
    if "load" in harness.exposed or "load" in harness.guarded:
        found["load_voltage"] = rail if "load" in harness.exposed else guarded
    for source in hookup.feeds:
        found[f"{source}_voltage"] = np.full(exposed.shape, hookup.feeds[source].emf_V)
        found[f"{source}_current"] = none
    for source, port in harness.sources():
        given = currents["battery.lead"] if source == "battery" else -currents["supply"]
        at_port = guarded if port == "guarded" else harness.sign * rail
        found[f"{source}_voltage"] = at_port + hookup.behind_ohm(source) * given
        # The stand-in's output feeds the resistor across it as well.
        own = -currents.get("battery", none) if source == "battery" else given
        found[f"{source}_current"] = own
        if port == "exposed" and hookup.folded:
            found["exposed_current"] = harness.sign * given
    return found
