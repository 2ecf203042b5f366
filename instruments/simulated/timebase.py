"""Where bench time comes from: a virtual clock that jumps, or the wall's."""

from __future__ import annotations

import threading
import time
from typing import Protocol


class Timebase(Protocol):
    """A clock that can be waited for."""

    def now(self) -> float:
        """Bench time in seconds since the start."""

    def elapse(self, seconds: float) -> None:
        """Let that much bench time pass."""


class VirtualTime:
    """Time passes only when somebody lets it, and then at once."""

    def __init__(self) -> None:
        self._now = 0.0

    def now(self) -> float:
        """Bench time in seconds."""
        return self._now

    def elapse(self, seconds: float) -> None:
        """Jump ahead."""
        self._now += seconds


class RealTime:
    """Bench time runs ``speed`` times as fast as the wall's."""

    def __init__(self, speed: float = 1.0) -> None:
        self._speed = speed
        self._start = time.monotonic()
        self._ended = threading.Event()

    def now(self) -> float:
        """Bench time in seconds."""
        return (time.monotonic() - self._start) * self._speed

    def elapse(self, seconds: float) -> None:
        """Sleep until that much bench time has passed, or until ``end``."""
        if seconds > 0:
            self._ended.wait(seconds / self._speed)

    def end(self) -> None:
        """Wake everybody who sleeps; from now on nobody waits."""
        self._ended.set()
