"""Who is connected where: leads by hand, relays by the switch unit, and what was moved hot."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable

from benchkit.files import BenchFile
from benchkit.harness import CHARGING, DRAWING, NAMES, SENSED, Harness
from benchkit.stage import Stage

SENSED_TOPOLOGIES = ("pmos-sensed", "nmos-sensed")


class Leads:
    """What a person wired, and the relays in between.

    ``connected`` is what comes of both: with the crossing relay closed the sources at the exposed
    port are turned, with neither relay of the pair closed they are off it, with both closed they
    are ``shorted``, and the port with them. The load's leads do not go through the pair.
    """

    def __init__(self, bench: BenchFile) -> None:
        self._wiring = bench.wiring
        self._battery = bench.battery is not None
        self._bleeder_ohm = bench.bench.bleeder_ohm
        self.by_hand = DRAWING
        self._closed: set[str] = set()
        self.shorts = 0
        """How often both polarity relays came to be closed."""
        self.shorted = False
        self.restart(DRAWING)

    def normal(self, stage: Stage) -> Harness:
        """As a stage is used: fed at the port where its source belongs."""
        if stage.guards == "load":
            return DRAWING
        sensed = stage.topology is not None and stage.topology.name in SENSED_TOPOLOGIES
        return SENSED if sensed and self._battery else CHARGING

    def restart(self, harness: Harness) -> None:
        """As after putting a board in: wired so, and the relays the right way round."""
        self.by_hand = harness
        straight = self._wiring.straight if self._wiring is not None else None
        self._closed = {straight} if straight is not None else set()
        self._update()

    def check(self, harness: Harness) -> None:
        """Refuse what nobody could connect: ValueError with a plain sentence."""
        for port, connected in (("exposed", harness.exposed), ("guarded", harness.guarded)):
            for name in connected:
                if connected.count(name) > 1:
                    raise ValueError(f"{NAMES[name]} is at the {port} port twice: name it once")
        for name in harness.exposed:
            if name in harness.guarded:
                raise ValueError(f"{NAMES[name]} cannot be at both ports: the bench has one")
        if "battery" in harness.guarded:
            raise ValueError(f"{NAMES['battery']} cannot be at the guarded port: it is for exposed")
        if "battery" in harness.exposed and not self._battery:
            raise ValueError(
                "this bench has no battery's stand-in: give a second supply stands_for = "
                '"battery" in the bench file'
            )
        if harness.bleeder_ohm is not None and harness.bleeder_ohm <= 0:
            raise ValueError(
                f"a bleeder of {harness.bleeder_ohm:g} ohm cannot be: it must be above 0 ohm"
            )

    def wire(self, harness: Harness) -> None:
        """Connect it so, by hand."""
        self.by_hand = harness
        self._update()

    def moves(self, route: str, closed: bool) -> bool:
        """Whether a relay of the bench moves when the switch unit opens or closes this route."""
        return route in self._routes() and (route in self._closed) != closed

    def relay(self, route: str, closed: bool) -> None:
        """Open or close a route; one that the bench does not use leads nowhere."""
        if self.moves(route, closed):
            (self._closed.add if closed else self._closed.remove)(route)
            self._update()

    def _routes(self) -> Iterable[str]:
        wiring = self._wiring
        if wiring is None:
            return ()
        return [r for r in (wiring.straight, wiring.crossed, wiring.bleeder) if r is not None]

    def _is(self, route: str | None) -> bool:
        return route is not None and route in self._closed

    def _update(self) -> None:
        made, wiring, before = self.by_hand, self._wiring, self.shorted
        self.shorted = False
        if wiring is not None:
            straight, crossed = self._is(wiring.straight), self._is(wiring.crossed)
            self.shorted = straight and crossed
            self.shorts += self.shorted and not before
            if wiring.straight is not None and not straight and not crossed:
                left = tuple(name for name in made.exposed if name == "load")
                made = dataclasses.replace(made, exposed=left)
            if crossed and not straight:
                made = dataclasses.replace(made, crossed=not made.crossed)
            if self._is(wiring.bleeder):
                bleeders = [r for r in (self._bleeder_ohm, made.bleeder_ohm) if r is not None]
                made = dataclasses.replace(made, bleeder_ohm=1 / sum(1 / r for r in bleeders))
        self.connected = made
