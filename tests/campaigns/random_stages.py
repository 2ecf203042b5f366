"""Random stages for the campaigns: parts whose laws range over decades, wired in every way.

One structure (which parts between which nodes) is drawn with many sets of parameters at once, as
arrays of shape (batch,). The ranges reach well beyond what can be bought.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Literal, cast

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.network import Element
from benchkit.parts.bipolar import BipolarLaw
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.fuse import FuseLaw
from benchkit.parts.knee import KneeLaw
from benchkit.parts.mosfet import ChannelLaw, MosfetLaws
from benchkit.parts.resistor import ResistorLaw
from benchkit.placing import Law, placed
from benchkit.prediction.connections import Conditions, Surroundings
from benchkit.stage import Stage
from benchkit.topologies import TOPOLOGIES, Wiring, wire, wire_network
from benchkit.topologies.base import MINUS, PLUS, TERMINALS, Topology

Floats = NDArray[np.float64]
INNER_NODES = ("x", "y", "z")


@dataclass(frozen=True)
class RandomStage:
    """What the scenarios ask of a stage: wiring, ports and what it guards; and its elements."""

    name: str
    wiring: Wiring
    guards: Literal["load", "supply"]
    elements: tuple[Element, ...]

    def as_stage(self) -> Stage:
        """For ``connections.SCENARIOS``, which ask for ``ports`` and ``guards`` only."""
        return cast(Stage, self)

    @property
    def ports(self) -> Any:
        """The nodes of its terminals."""
        return self.wiring.ports


class Draw:
    """Random laws, one set of parameters for each entry of a batch."""

    def __init__(self, seed: tuple[int, int], batch: int) -> None:
        self.draw = np.random.default_rng(seed)
        self.batch = batch

    def decades(self, low: float, high: float) -> Floats:
        """Evenly over the decades between two values."""
        return np.exp(self.draw.uniform(np.log(low), np.log(high), self.batch))

    def evenly(self, low: float, high: float) -> Floats:
        """Evenly between two values."""
        return self.draw.uniform(low, high, self.batch)

    def one(self, low: float, high: float) -> float:
        """One value for the whole batch."""
        return float(self.draw.uniform(low, high))

    def sometimes(self, values: Floats) -> Floats:
        """Nothing in half of the entries."""
        return values * self.draw.integers(0, 2, self.batch)

    def diode(self, knee: KneeLaw | None = None) -> DiodeLaw:
        """A Schottky, a rectifier, a signal diode, or a body diode."""
        return DiodeLaw(
            self.decades(1e-18, 1e-3), self.evenly(1.0, 2.0), self.decades(1e-4, 10.0),
            self.one(0.6, 1.2), self.one(2.0, 3.0),
            self.sometimes(self.decades(1e-12, 1e-2)), self.one(1.0, 100.0), self.one(0.3, 1.5),
            self.one(8.0, 12.0), knee,
        )  # fmt: skip

    def zener(self) -> DiodeLaw:
        """A diode with breakdown; a suppressor is one with little resistance."""
        volts, test = self.decades(2.4, 200.0), self.decades(1e-4, 0.1)
        # At its test current the resistance drops at most half of the voltage, as a sheet's does.
        series = np.minimum(self.decades(0.01, 1e3), 0.5 * volts / test)
        return self.diode(
            KneeLaw(volts, test, volts * self.decades(1e-3, 0.1), series, 1e-3 * (volts - 5.0))
        )

    def mosfet(self) -> MosfetLaws:
        """From a small signal part to a power switch, depletion included."""
        channel = ChannelLaw(
            self.decades(1e-4, 1e3), self.evenly(-0.5, 6.0), self.decades(1e-4, 10.0),
            self.one(0.3, 4.0),
        )  # fmt: skip
        return MosfetLaws(channel, self.diode())

    def bipolar(self) -> BipolarLaw:
        """From hardly any gain to a high one."""
        return BipolarLaw(
            self.decades(1e-18, 1e-6), self.decades(1.0, 2000.0), self.decades(0.1, 50.0),
            self.decades(1e-3, 100.0),
            KneeLaw(
                self.evenly(3.0, 20.0), self.decades(1e-6, 1e-3), self.decades(0.01, 0.3),
                self.decades(1.0, 1e3),
            ),
            self.sometimes(self.decades(1e-12, 1e-6)),
        )  # fmt: skip

    def fuse(self) -> FuseLaw:
        """Milliamperes to a hundred amperes, dropping 10 mV to 1 V at its rating."""
        rated = self.decades(1e-3, 100.0)
        return FuseLaw(
            self.decades(0.01, 1.0) / rated, self.sometimes(self.decades(0.01, 5.0)),
            1.4 * rated, 1.0, 0.0,
        )  # fmt: skip

    def law(self, kind: str) -> Law:
        """A part of any kind."""
        kinds: Mapping[str, Callable[[], Law]] = {
            "diode": self.diode, "tvs": self.zener, "zener": self.zener,
            "p-mosfet": self.mosfet, "n-mosfet": self.mosfet,
            "npn": self.bipolar, "pnp": self.bipolar, "fuse": self.fuse,
            "resistor": lambda: ResistorLaw(self.decades(1e-2, 1e8)),
            "lead": lambda: ResistorLaw(self.decades(1e-4, 1.0)),
        }  # fmt: skip
        return kinds[kind]()

    def around(self) -> Surroundings:
        """What is on both ports; its numbers are arrays here."""
        limited = bool(self.draw.integers(2))
        values: dict[str, Any] = {
            "source_ohm": self.decades(1e-3, 10.0),
            "source_limit_A": self.decades(1e-3, 100.0) if limited else None,
            "battery_V": self.decades(0.1, 400.0), "battery_ohm": self.decades(1e-3, 10.0),
            "flat_V": self.evenly(0.0, 1.0),
            "set_V": self.decades(0.1, 400.0), "limit_A": self.decades(1e-3, 100.0),
            "off_ohm": self.decades(10.0, 1e7), "passive_ohm": self.decades(0.1, 1e6),
            "hold_V": self.decades(0.1, 400.0), "hold_ohm": self.decades(1e-3, 100.0),
            "assumed": (),
        }  # fmt: skip
        return Surroundings(**values)

    def conditions(self) -> Conditions:
        """0.1 to 400 V that drive it, and nanoamperes to 100 A."""
        return Conditions(self.decades(0.1, 400.0), self.decades(1e-9, 100.0))

    def _stage(
        self, name: str, wiring: Wiring, kinds: Mapping[str, str], guards: Literal["load", "supply"]
    ) -> RandomStage:
        elements = [
            element
            for reference, nodes in wiring.parts.items()
            for element in placed(
                reference, kinds[reference], nodes, self.law(kinds[reference]),
                self.evenly(-40.0, 150.0),
            )
        ]  # fmt: skip
        return RandomStage(name, wiring, guards, tuple(elements))

    def of_topology(self, topology: Topology) -> RandomStage:
        """One of the nine, with some of the parts that it can do without."""
        fitted = [
            key for key, role in topology.roles.items()
            if role.absent == "required" or self.draw.integers(2)
        ]  # fmt: skip
        kinds = {key: str(self.draw.choice(topology.roles[key].kinds)) for key in fitted}
        wiring = wire(topology, {key: key for key in fitted})
        return self._stage(topology.name, wiring, kinds, topology.guards)

    def of_network(self) -> RandomStage:
        """Two to eight parts of any kind between any nodes, joined or not."""
        nodes = [*PLUS, *MINUS, *INNER_NODES[: self.draw.integers(0, 4)]]
        kinds: dict[str, str] = {}
        parts: dict[str, tuple[str, ...]] = {}
        for number in range(self.draw.integers(2, 9)):
            kind = str(self.draw.choice(list(TERMINALS)))
            ends = self.draw.choice(nodes, len(TERMINALS[kind]))
            if len(set(ends)) > 1:
                kinds[f"P{number}"] = kind
                parts[f"P{number}"] = tuple(str(end) for end in ends)
        guards: Literal["load", "supply"] = "load" if self.draw.integers(2) else "supply"
        return self._stage("network", wire_network(parts, guards), kinds, guards)


def topology_of(number: int) -> Topology:
    """The nine in turn."""
    names = list(TOPOLOGIES)
    return TOPOLOGIES[names[number % len(names)]]
