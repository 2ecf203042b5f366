"""How a board gets into the fixture and its leads changed: by a person, by relays, or in the
simulated world by asking for it."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Protocol

from benchkit.errors import InputError, OperatorStopped
from benchkit.harness import Harness
from benchkit.protocols import Operator
from instruments.errors import InstrumentError
from instruments.relays import PolarityRelay
from instruments.session import Session
from instruments.switch import ScpiSwitch


class Fixture(Protocol):
    """Where the board under test sits."""

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        """Have board ``serial`` put in and connected so; OperatorStopped when that is declined."""

    def arrange(self, harness: Harness) -> None:
        """Have sources and load connected as told, with everything off; OperatorStopped when that
        is declined. What was done is proved by measurement elsewhere."""

    def refit_fuse(self, name: str) -> None:
        """Have a new fuse put in, with everything off; OperatorStopped when that is declined."""


class HandFixture:
    """A person puts the board in."""

    def __init__(self, operator: Operator) -> None:
        self._operator = operator

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        """Ask, and wait for the answer; what was done is then proved by measurement."""
        del stage_path
        if not self._operator.instruct(
            f"Put board {serial} into the fixture: {harness.sentence()}; Kelvin leads on the "
            "ports, thermocouple on the main part's case"
        ):
            raise OperatorStopped(f"board {serial} was not put in")

    def arrange(self, harness: Harness) -> None:
        """Say which lead goes where, and wait for the answer."""
        if not self._operator.instruct(f"With everything off: {harness.sentence()}"):
            raise OperatorStopped(f"the leads were not moved: {harness.sentence()}")

    def refit_fuse(self, name: str) -> None:
        """Ask for it, and wait for the answer."""
        if not self._operator.instruct(f"With everything off: put a new fuse in for {name}"):
            raise OperatorStopped(f"no new fuse was put in for {name}")


class ReadyFixture:
    """Nobody is there: the board is in already, as the harness says, and nothing can be moved."""

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        """Take it for done; what is there is then proved by measurement."""

    def arrange(self, harness: Harness) -> None:
        """OperatorStopped: there is nobody."""
        raise OperatorStopped(f"nobody is there to move leads: {harness.sentence()}")

    def refit_fuse(self, name: str) -> None:
        """OperatorStopped: there is nobody."""
        raise OperatorStopped(f"nobody is there to put a new fuse in for {name}")


class SimulatedFixture:
    """The simulated bench draws the board from its stage's tolerances."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        """Ask the simulated bench for the board; everything in it starts at ambient."""
        path = str(stage_path.resolve()).replace('"', '""')
        try:
            self._session.set(f':SIM:INS "{serial}","{path}"', "slow")
        except InstrumentError as error:
            raise InputError(
                f"{stage_path}: the simulated bench cannot build board {serial}: {error}"
            ) from None
        self.arrange(harness)

    def arrange(self, harness: Harness) -> None:
        """Ask the simulated bench for it, which does it even when something is on."""
        ports = ",".join(f'"{"+".join(at)}"' for at in (harness.exposed, harness.guarded))
        bleeder = f",{harness.bleeder_ohm:g}" if harness.bleeder_ohm is not None else ""
        self._session.set(f":SIM:WIRE {ports},{int(harness.crossed)}{bleeder}", "slow")

    def refit_fuse(self, name: str) -> None:
        """Ask the simulated bench for it."""
        self._session.set(f':SIM:FUSE "{name}"', "slow")


class RelayFixture:
    """Relays do what they can, and ``hands`` the rest. Never hot: that is the guard's business.

    relay: turns the leads at the exposed port. bleeder: the switch and the route that connect the
    resistor across the guarded port.
    """

    def __init__(
        self,
        hands: Fixture,
        relay: PolarityRelay | None,
        bleeder: tuple[ScpiSwitch, str] | None,
    ) -> None:
        self._hands, self._relay, self._bleeder = hands, relay, bleeder
        self._wired: Harness | None = None

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        """Relays at rest, then the board."""
        self._switch(harness)
        self._wired = None
        wanted = self.by_hand(harness)
        self._hands.place(serial, stage_path, wanted)
        self._wired = wanted

    def arrange(self, harness: Harness) -> None:
        """The relays, and what has to be done by hand, if anything."""
        # Relays first: it was seen that nothing is live, and hands may take their time.
        self._switch(harness)
        wanted = self.by_hand(harness)
        if wanted != self._wired:
            self._wired = None  # if it is declined, nobody knows how far it went
            self._hands.arrange(wanted)
            self._wired = wanted

    def refit_fuse(self, name: str) -> None:
        """No relay does that."""
        self._hands.refit_fuse(name)

    def by_hand(self, harness: Harness) -> Harness:
        """What of a harness is left for a person."""
        return by_hand(harness, crosses=self._relay is not None, bleeds=self._bleeder is not None)

    def _switch(self, harness: Harness) -> None:
        if self._bleeder is not None:
            switch, route = self._bleeder
            switch.set(route, harness.bleeder_ohm is not None)
        if self._relay is not None:
            self._relay.set(harness.crossed)


def by_hand(harness: Harness, *, crosses: bool, bleeds: bool) -> Harness:
    """What of a harness is left for a person where a relay crosses, or connects the bleeder."""
    return replace(
        harness,
        crossed=harness.crossed and not crosses,
        bleeder_ohm=None if bleeds else harness.bleeder_ohm,
    )
