"""Getting a board into the fixture, and the leads to its ports: by hand, or in the simulated world
by asking for it."""

from __future__ import annotations

from pathlib import Path
from typing import Protocol

from benchkit.errors import InputError, OperatorStopped
from benchkit.harness import Harness
from benchkit.protocols import Operator
from instruments.errors import InstrumentError
from instruments.session import Session


class Fixture(Protocol):
    """Where the board under test sits."""

    def place(self, serial: str, stage_path: Path) -> None:
        """Have board ``serial`` put in and connected right way round; OperatorStopped when that is
        declined."""

    def arrange(self, harness: Harness) -> None:
        """Have supply and load connected as told, with everything off; OperatorStopped when that
        is declined. What was done is proved by measurement elsewhere."""


class HandFixture:
    """A person puts the board in."""

    def __init__(self, operator: Operator) -> None:
        self._operator = operator

    def place(self, serial: str, stage_path: Path) -> None:
        """Ask, and wait for the answer; what was done is then proved by measurement."""
        del stage_path
        if not self._operator.instruct(
            f"Put board {serial} into the fixture: exposed port to the supply, guarded port to the "
            "load, Kelvin leads on the ports, thermocouple on the main part's case"
        ):
            raise OperatorStopped(f"board {serial} was not put in")

    def arrange(self, harness: Harness) -> None:
        """Say which lead goes where, and wait for the answer."""
        if not self._operator.instruct(f"With everything off: {harness.sentence()}"):
            raise OperatorStopped(f"the leads were not moved: {harness.sentence()}")


class SimulatedFixture:
    """The simulated bench draws the board from its stage's tolerances."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def place(self, serial: str, stage_path: Path) -> None:
        """Ask the simulated bench for the board; everything in it starts at ambient."""
        path = str(stage_path.resolve()).replace('"', '""')
        try:
            self._session.set(f':SIM:INS "{serial}","{path}"', "slow")
        except InstrumentError as error:
            raise InputError(
                f"{stage_path}: the simulated bench cannot build board {serial}: {error}"
            ) from None

    def arrange(self, harness: Harness) -> None:
        """Ask the simulated bench for it, which does it even when something is on."""
        self._session.set(
            f':SIM:WIRE "{harness.exposed}","{harness.guarded}",{int(harness.crossed)}', "slow"
        )
