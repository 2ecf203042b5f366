"""Bench time: the machine's own clock, or that of the simulated bench."""

from __future__ import annotations

import time

from instruments.numbers import format_number
from instruments.session import Session


class WallClock:
    """Real time, monotonic."""

    def now(self) -> float:
        """Seconds since an arbitrary start."""
        return time.monotonic()

    def sleep(self, seconds: float) -> float:
        """Wait; returns the time then."""
        time.sleep(seconds)
        return time.monotonic()


class SimulatedClock:
    """The simulated bench's time, asked for and advanced over its control port."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def now(self) -> float:
        """Seconds of the simulated bench."""
        return self._session.ask_number(":SIM:TIME?")

    def sleep(self, seconds: float) -> float:
        """Let simulated time pass; returns the time then, in the same round trip."""
        return self._session.ask_number(f":SIM:TIME:ADV {format_number(seconds)};:SIM:TIME?")
