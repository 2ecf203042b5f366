"""What the simulated instruments of one bench share: the world, the lock, time and seeds."""

from __future__ import annotations

import random
import threading
from collections.abc import Callable

from instruments.simulated.world import World

MESSAGE_S = 0.0002
"""Bench time that every message to an instrument takes."""


def error_generator(seed: int, name: str) -> random.Random:
    """Generator of an instrument's gain and offset errors: the same for every board.

    ``random.Random`` seeds itself from all the bytes of a string, so that runs agree whatever
    PYTHONHASHSEED is.
    """
    return random.Random(f"errors|{seed}|{name}")


def noise_generator(seed: int, name: str, serial: str) -> random.Random:
    """Generator of an instrument's noise from the insertion of a board until the next one, so
    that a board's readings do not depend on what was measured before it."""
    return random.Random(f"noise|{seed}|{name}|{serial}")


class Core:
    """The world behind a lock, and those who want to know that time has passed.

    ``pause`` is None with a virtual clock: time then passes inside the world, under the lock. In
    real time it is a function that sleeps; it is called without the lock, so that a long reading
    on one instrument does not hold up the others, and ``world.elapse(0)`` afterwards brings the
    world up to its clock.
    """

    def __init__(
        self, world: World, seed: int, serial: str, pause: Callable[[float], None] | None = None
    ) -> None:
        self.world = world
        self.seed = seed
        self.serial = serial
        self.lock = threading.RLock()
        self.watchers: list[Callable[[], None]] = []
        self.insertions: list[Callable[[], None]] = []
        self.rearmed: list[Callable[[str | None], None]] = []
        self._pause = pause

    def elapse(self, seconds: float) -> None:
        """Let bench time pass, then let the protections look; the caller holds the lock once."""
        if self._pause is None:
            self.world.elapse(seconds)
        else:
            self.lock.release()
            try:
                self._pause(seconds)
            finally:
                self.lock.acquire()
            self.world.elapse(0.0)
        self.watch()

    def watch(self) -> None:
        """Let whoever watches the terminals look at them now."""
        for watcher in self.watchers:
            watcher()

    def insert(self, serial: str, stage_path: str) -> None:
        """Put a board into the fixture and start every instrument's noise anew."""
        self.world.insert(serial, stage_path)
        self.serial = serial
        for told in self.insertions:
            told()
        self.rearm()
        self.watch()

    def rearm(self, fault: str | None = None) -> None:
        """A fault was given (None: all may have changed): count its answers anew."""
        for told in self.rearmed:
            told(fault)
