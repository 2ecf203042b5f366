"""The simulated switch unit: relays by route, and digital inputs by name."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile
from instruments.simulated.core import Core
from instruments.simulated.errors import ScpiError
from instruments.simulated.message import Datum, Kind
from instruments.simulated.parameters import Channels
from instruments.simulated.scpi import Device
from instruments.simulated.tree import Entry

FIRST_ROUTE, LAST_ROUTE = 301, 320
EVERY_ROUTE = 1.0
"""The value of a fault that was given none: it holds every relay of the unit."""

_LINE = re.compile(r"@\s*([0-9A-Za-z_.]+)\s*", re.ASCII)


@dataclass(frozen=True, slots=True)
class Line:
    """A channel list with one digital input in it, by number or by name; gives its name.

    SCPI-1999 volume 1 chapter 8 has path names in channel lists (from memory)."""

    optional: bool = False
    kinds: tuple[Kind, ...] = ("list",)

    def convert(self, datum: Datum) -> str:
        """Return the name as it was spelled; -171 for anything but one."""
        found = _LINE.fullmatch(datum.text)
        if found is None:
            raise ScpiError(-171)
        return found[1]


class SwitchUnit(Device):
    """Relays 301 to 320, and those of the bench file; inputs are the world's to know.

    The bench is found with its polarity relay straight, and putting a board in moves no relay;
    *RST opens every one.
    Faults, of one route where the value is its number: ``relay-stuck:NAME``, the contact stays
    where it was, and the read-back says so; ``relay-lying:NAME``, it stays where it was, and the
    read-back says what was asked for.
    """

    def __init__(self, core: Core, name: str, bench: BenchFile) -> None:
        self._spelled = {route: str(route) for route in range(FIRST_ROUTE, LAST_ROUTE + 1)}
        wiring, straight = bench.wiring, None
        if wiring is not None and wiring.instrument == name:
            for key in ("straight", "crossed", "bleeder"):
                self._add(key, getattr(wiring, key))
            straight = None if wiring.straight is None else int(wiring.straight)
        self._stuck, self._lying = f"relay-stuck:{name}", f"relay-lying:{name}"
        self._asked = dict.fromkeys(self._spelled, False)
        self._closed = dict.fromkeys(self._spelled, False)
        super().__init__(core, name, bench.instruments[name].identity)
        if straight is not None:
            self._asked[straight] = self._closed[straight] = True
        self.inserted()
        core.watchers.append(self.watch)
        core.insertions.append(self.inserted)

    def _add(self, key: str, route: str | None) -> None:
        if route is None:
            return
        if not (route.isascii() and route.isdigit()):
            raise InputError(
                f"wiring.{key} is {route!r}: the simulated switch unit numbers its routes, so it "
                'must be a number such as "301"'
            )
        self._spelled[int(route)] = route

    def table(self) -> list[Entry]:
        """The commands."""
        routes = Channels(frozenset(self._spelled))
        return [
            Entry("ROUTe:CLOSe", lambda listed: self._command(listed, True), (routes,)),
            Entry("ROUTe:CLOSe?", lambda listed: self._say(listed, True), (routes,)),
            Entry("ROUTe:OPEN", lambda listed: self._command(listed, False), (routes,)),
            Entry("ROUTe:OPEN?", lambda listed: self._say(listed, False), (routes,)),
            Entry("ROUTe:OPEN:ALL", self.reset),
            Entry("SENSe:DIGital:DATA?", self._level, (Line(),)),
        ]

    def reset(self) -> None:
        """*RST: every relay open."""
        self._command(tuple(self._spelled), False)

    def inserted(self) -> None:
        """A board was put into the fixture: the world hears where every contact is, open ones
        first, so that a pair is never closed in between."""
        for route in sorted(self._spelled, key=self._closed.__getitem__):
            self.core.world.relay(self._spelled[route], self._closed[route])

    def watch(self) -> None:
        """Let every contact go where it was sent, unless a fault holds it."""
        for route, asked in self._asked.items():
            if self._closed[route] != asked and not (
                self._held(self._stuck, route) or self._held(self._lying, route)
            ):
                self._closed[route] = asked
                self.core.world.relay(self._spelled[route], asked)

    def _command(self, routes: Sequence[int], closed: bool) -> None:
        for route in routes:
            self._asked[route] = closed
            self.watch()

    def _say(self, routes: Sequence[int], closed: bool) -> str:
        return ",".join(str(int(self._read_back(route) is closed)) for route in routes)

    def _read_back(self, route: int) -> bool:
        return (self._asked if self._held(self._lying, route) else self._closed)[route]

    def _held(self, fault: str, route: int) -> bool:
        return self.core.world.active(fault) in (EVERY_ROUTE, float(route))

    def _level(self, name: str) -> str:
        return str(int(self.core.world.line(name)))
