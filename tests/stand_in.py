"""A scripted bench for the guard: no sockets, no simulated plant, just what a test tells it."""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass, field

from benchkit.errors import LinkError
from benchkit.guard import Ceilings, Guard
from benchkit.harness import Harness
from benchkit.protocols import Protection, SupplyState
from benchkit.reading import POINT_UNITS, Reading, Status

TODAY = dt.date(2026, 11, 5)


@dataclass
class World:
    """What is true, and what goes wrong."""

    time_s: float = 0.0
    on: bool = False
    volts: float = 0.0
    limit_A: float = 0.0
    load_A: float = 0.0
    case_C: float = 25.0
    ambient_C: float = 25.0
    said: list[str] = field(default_factory=list)
    points_read: list[str] = field(default_factory=list)
    stuck: bool = False
    lying: bool = False
    deaf: bool = False
    meter_dead: bool = False
    wrong_levels: bool = False
    tripped: bool = False
    polarity: int = 1
    crossing_stuck: bool = False
    trips_at_limit: bool = False
    conducts_reversed: bool = False
    """Whether the stage carries current in reverse, up to the supply's limit."""
    wired: list[Harness] = field(default_factory=list)
    residual_V: float = 0.0
    sensor_lost: bool = False
    lead_off: bool = False
    heating_K_per_s: float = 0.0
    load_stuck: bool = False
    reading_s: float = 0.0
    burst: list[str] = field(default_factory=list)
    broken: dict[str, Exception] = field(default_factory=dict)
    """What the supply, the load or the meter raises, by what is asked of it."""

    def limits(self) -> bool:
        shorted = self.on and self.polarity < 0 and self.conducts_reversed
        return shorted or self.load_A > self.limit_A

    def amps(self) -> float:
        if not self.on:
            return 0.0
        return self.limit_A if self.limits() else self.load_A

    def port_V(self) -> float:
        if not self.on:
            return self.residual_V
        return self.polarity * (0.02 if self.limits() else self.volts)

    def guarded_V(self) -> float:
        if self.port_V() < 0 and not self.conducts_reversed:
            return 0.0
        return self.port_V() - 0.02 * self.load_A

    def break_at(self, what: str) -> None:
        if what in self.broken:
            raise self.broken[what]

    def pass_time(self, seconds: float) -> None:
        self.time_s += seconds
        if self.on:
            self.case_C += self.heating_K_per_s * seconds


@dataclass
class StandInSupply:
    world: World
    role: str = "supply"

    def _heard(self, what: str) -> None:
        self.world.said.append(what)
        self.world.break_at(what)
        if self.world.deaf:
            raise LinkError("supply: no answer")

    def program(self, voltage_V: float, current_A: float) -> None:
        self._heard(f"program {voltage_V:g} {current_A:g}")
        self.world.volts, self.world.limit_A = voltage_V, current_A

    def protect(self, protection: Protection) -> Protection:
        self._heard("protect")
        self.world.tripped = False
        if self.world.wrong_levels:
            return Protection(60.0, protection.over_current_A)
        return protection

    def enable(self) -> None:
        self._heard("on")
        self.world.on = True

    def send_off(self) -> None:
        self.world.said.append("send off")
        if not self.world.stuck:
            self.world.on = False

    def disable(self, *, patiently: bool = True) -> None:
        del patiently
        self.world.said.append("off")
        if not self.world.stuck:
            self.world.on = False
        self.world.break_at("off")
        if self.world.deaf:
            raise LinkError("supply: no answer")
        if self.world.stuck and not self.world.lying:
            raise LinkError("supply: output reads back as on")

    def state(self) -> SupplyState:
        self._heard("state")
        w = self.world
        if w.trips_at_limit and w.on and w.limits():
            w.on, w.tripped = False, True
        volts = abs(w.port_V()) if w.on else 0.0
        return SupplyState(w.on, volts, w.amps(), w.limits(), w.tripped)


@dataclass
class StandInLoad:
    world: World
    role: str = "load"

    def draw(self, current_A: float) -> None:
        self.world.said.append(f"draw {current_A:g}")
        self.world.load_A = current_A

    def release(self) -> None:
        self.world.said.append("release")
        self.world.break_at("release")
        if self.world.load_stuck:
            raise LinkError("load: input reads back as on")
        self.world.load_A = 0.0


@dataclass
class StandInPoints:
    world: World

    def names(self) -> tuple[str, ...]:
        return tuple(POINT_UNITS)

    def expect(self, point: str, largest: float) -> None:
        self.world.said.append(f"expect {point} {largest:g}")

    def forget(self) -> None:
        self.world.said.append("forget")

    def recover(self, point: str) -> None:
        self.world.said.append(f"recover {point}")

    def can_burst(self, points: Sequence[str]) -> str | None:
        return None if points else "nothing to read"

    def arm_burst(self, points: Sequence[tuple[str, float]], seconds: float) -> None:
        self.world.said.append(f"burst {seconds:g}")
        self.world.burst = [point for point, _ in points]

    def fetch_burst(self, began_s: float) -> list[Reading]:
        return [self.read(point, began_s) for point in self.world.burst]

    def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
        del quick
        w = self.world
        w.points_read.append(point)
        w.break_at(f"read {point}")
        w.pass_time(w.reading_s)
        if w.meter_dead and point not in ("case", "ambient"):
            raise LinkError("meter: connection closed")
        values = {
            "exposed_voltage": w.port_V(),
            "guarded_voltage": w.guarded_V(),
            "drop": 0.4 if w.lead_off else w.port_V() - w.guarded_V(),
            "exposed_current": w.polarity * w.amps(),
            "case": w.case_C,
            "ambient": w.ambient_C,
        }
        status: Status = "invalid" if w.sensor_lost and point == "case" else "ok"
        return Reading(time_s, point, values[point], POINT_UNITS[point], 0.001, 10.0, status)


@dataclass
class StandInWiring:
    world: World

    def arrange(self, harness: Harness) -> None:
        self.world.wired.append(harness)
        if not self.world.crossing_stuck:
            self.world.polarity = harness.sign

    def refit_fuse(self, name: str) -> None:
        self.world.said.append(f"new fuse {name}")


@dataclass
class StandInClock:
    world: World

    def now(self) -> float:
        return self.world.time_s

    def sleep(self, seconds: float) -> float:
        self.world.pass_time(seconds)
        return self.world.time_s


@dataclass
class StandInOperator:
    answer: bool = True

    def acknowledge(self, caution: str) -> bool:
        del caution
        return self.answer

    def instruct(self, text: str) -> bool:
        del text
        return self.answer


@dataclass
class Notes:
    """A journal in memory."""

    readings: list[tuple[str, Reading]] = field(default_factory=list)
    events: list[tuple[str, str]] = field(default_factory=list)

    def reading(self, step: str, reading: Reading) -> None:
        self.readings.append((step, reading))

    def event(self, kind: str, text: str, **facts: object) -> None:
        del facts
        self.events.append((kind, text))

    def kinds(self) -> list[str]:
        return [kind for kind, _ in self.events]


def guard_of(
    world: World,
    notes: Notes | None = None,
    *,
    due: dt.date = dt.date(2027, 1, 1),
    operator: StandInOperator | None = None,
    shield: Callable[[], AbstractContextManager[None]] = nullcontext,
    watcher: Callable[[Reading], None] | None = None,
    waits_s: float = 0.0,
    proved: bool = True,
) -> Guard:
    """A guard on a scripted bench; ``proved``: as if its leads had been proved already."""
    guard = Guard(
        {"supply": StandInSupply(world)},
        StandInLoad(world),
        StandInPoints(world),
        StandInClock(world),
        operator or StandInOperator(),
        notes if notes is not None else Notes(),
        Ceilings(voltage_max_V=30, current_max_A=10, power_max_W=200, case_max_C=110, poll_s=1.0),
        {"meter": due},
        TODAY,
        waits_s=waits_s,
        wiring=StandInWiring(world),
        shield=shield,
        watcher=watcher,
    )
    guard._leads.proved = proved
    return guard
