"""What the simulated instruments of one bench share: the world, the lock, time and seeds."""

from __future__ import annotations

import random
import threading
from collections.abc import Callable
from typing import Protocol

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


class Sampler(Protocol):
    """Somebody who looks at the world at times of its own, whoever lets time pass meanwhile."""

    def due_s(self) -> float | None:
        """Bench time of the next look; None when there is none to come."""

    def sample(self) -> None:
        """Look, and let no time pass; the next look is another one afterwards."""


class Core:
    """The world behind a lock, and those who want to know that time has passed.

    ``watchers`` look after every piece of time; ``samplers`` have looks at times of their own, and
    time is let pass in pieces that end there.

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
        self.samplers: list[Sampler] = []
        self.insertions: list[Callable[[], None]] = []
        self.rearmed: list[Callable[[str | None], None]] = []
        self._pause = pause

    def elapse(self, seconds: float) -> None:
        """Let bench time pass, then let the protections look; the caller holds the lock once.

        Samples that are due meanwhile are taken each at its time, after the protections looked.
        """
        left = seconds
        while (due := self._due(left)) is not None:
            at_s, sampler = due
            wait = max(0.0, at_s - self.world.now())
            self._pass(wait)
            left -= wait
            if sampler.due_s() == at_s:  # in real time another thread may have taken it
                sampler.sample()
        self._pass(max(0.0, left))

    def attend(self, sampler: Sampler) -> None:
        """A sampler has begun. In real time nobody may be speaking to the bench when its looks are
        due, so a thread waits for them; a virtual clock stands still meanwhile."""
        if self._pause is not None:
            threading.Thread(target=self._wait_for, args=(sampler,), daemon=True).start()

    def _wait_for(self, sampler: Sampler) -> None:
        with self.lock:
            while (at_s := sampler.due_s()) is not None:
                self.elapse(max(0.0, at_s - self.world.now()))

    def _due(self, within_s: float) -> tuple[float, Sampler] | None:
        """The next look that is due within so many seconds, and whose it is."""
        found: tuple[float, Sampler] | None = None
        for sampler in self.samplers:
            at_s = sampler.due_s()
            if at_s is not None and (found is None or at_s < found[0]):
                found = at_s, sampler
        return found if found is not None and found[0] - self.world.now() <= within_s else None

    def _pass(self, seconds: float) -> None:
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
