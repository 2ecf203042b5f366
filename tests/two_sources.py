"""A scripted bench with two sources, for attempts to break the guard."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from benchkit.guard import Ceilings, Drive, Envelope, Guard
from benchkit.harness import Harness, Source
from benchkit.protocols import Protection, SupplyState
from tests.stand_in import (
    TODAY,
    Notes,
    StandInClock,
    StandInLoad,
    StandInOperator,
    StandInPoints,
    StandInWiring,
    World,
)

BOTH = Harness(("battery",), ("supply",), crossed=True)
BESIDE = Drive(12.0, 0.5, 13.7, 0.55, may_limit=True)
STEP = Envelope(
    "two sources", 12.0, 0.5, 13.7, 0.55, 90.0, 20.0, 600.0, may_limit=True, beside=BESIDE
)
LONE = replace(STEP, name="the battery alone", source="battery", beside=None)


@dataclass
class Output:
    """One source of the scripted bench, and what goes wrong with it."""

    on: bool = False
    volts: float = 0.0
    limit_A: float = 0.0
    lying: bool = False
    """It says that it is off, and stays on."""
    breaks: dict[str, Exception] = field(default_factory=dict)
    takes_s: dict[str, float] = field(default_factory=dict)
    """How long an order takes."""


@dataclass
class TwoSources(World):
    """A battery at the exposed port, crossed, a supply at the guarded one, a stage that blocks."""

    outputs: dict[str, Output] = field(
        default_factory=lambda: {"supply": Output(), "battery": Output()}
    )

    def port_V(self) -> float:
        battery = self.outputs["battery"]
        return -battery.volts if battery.on else self.residual_V

    def guarded_V(self) -> float:
        supply = self.outputs["supply"]
        return supply.volts if supply.on else 0.0

    def amps(self) -> float:
        return 0.0

    def any_on(self) -> bool:
        return any(output.on for output in self.outputs.values())


@dataclass
class Sourced:
    world: TwoSources
    role: str

    @property
    def me(self) -> Output:
        return self.world.outputs[self.role]

    def _told(self, what: str) -> None:
        self.world.said.append(f"{self.role} {what}")
        self.world.pass_time(self.me.takes_s.get(what, 0.0))
        if what in self.me.breaks:
            raise self.me.breaks[what]

    def program(self, voltage_V: float, current_A: float) -> None:
        self._told("program")
        self.me.volts, self.me.limit_A = voltage_V, current_A

    def protect(self, protection: Protection) -> Protection:
        self._told("protect")
        return protection

    def enable(self) -> None:
        self._told("on")
        self.me.on = True

    def send_off(self) -> None:
        self._told("send off")
        self.me.on = self.me.on and self.me.lying

    def disable(self, *, patiently: bool = True) -> None:
        self._told("off" if patiently else "quick off")
        self.me.on = self.me.on and self.me.lying

    def state(self) -> SupplyState:
        self._told("state")
        says = self.me.on and not self.me.lying
        return SupplyState(says, self.me.volts if says else 0.0, 0.0, False, False)


class Watched:
    """An interlock that a test opens."""

    role = "input 1"
    shut = True

    def closed(self) -> bool:
        return self.shut


def two(world: TwoSources, notes: Notes | None = None, harness: Harness = BOTH) -> Guard:
    """A guard over both, as if its leads had been proved."""
    supplies: dict[Source, Sourced] = {
        "supply": Sourced(world, "supply"),
        "battery": Sourced(world, "battery"),
    }
    guard = Guard(
        supplies,
        StandInLoad(world),
        StandInPoints(world),
        StandInClock(world),
        StandInOperator(),
        notes if notes is not None else Notes(),
        Ceilings(voltage_max_V=30, current_max_A=10, power_max_W=200, case_max_C=110, poll_s=1.0),
        {"meter": TODAY},
        TODAY,
        wiring=StandInWiring(world),
    )
    guard._leads.harness, guard._leads.proved = harness, True
    return guard
