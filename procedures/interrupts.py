"""Ctrl-C, a closed terminal and a polite kill end a run like a trip does: off first."""

from __future__ import annotations

import signal
import time
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

from benchkit.errors import OperatorStopped

NAMES = ("SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT", "SIGTSTP")
"""Ctrl-Z too: a process that is suspended watches nothing."""
REPEAT_S = 2.0
"""A signal this soon after another is its repetition: the run is on its way out already, and must
not be stopped between the first and the switching off."""


class _Interrupt(KeyboardInterrupt):
    """A signal on its way out. No Exception, so that nothing takes it for a fault of the link."""


class Interrupts:
    """Turns signals into OperatorStopped, but never inside ``shield``."""

    def __init__(self) -> None:
        self._shielded = 0
        self._waiting: str | None = None
        self._raised_s = float("-inf")

    @contextmanager
    def listening(self) -> Iterator[Interrupts]:
        """Take the signals over, and give them back at the end."""
        numbers = [getattr(signal, name) for name in NAMES if hasattr(signal, name)]
        before = {number: signal.signal(number, self._handle) for number in numbers}
        try:
            yield self
        except _Interrupt as interrupt:
            raise OperatorStopped(str(interrupt)) from None
        finally:
            for number, handler in before.items():
                signal.signal(number, handler)

    @contextmanager
    def shield(self) -> Iterator[None]:
        """Nothing interrupts what is in here: switching off is not to be stopped half way.

        A signal that came meanwhile takes effect at the end, unless an error is on its way out.
        """
        self._shielded += 1
        try:
            yield
        finally:
            self._shielded -= 1
        if self._waiting is not None and not self._shielded:
            name, self._waiting = self._waiting, None
            self._stop(name)

    def _handle(self, number: int, frame: FrameType | None) -> None:
        del frame
        name = signal.Signals(number).name
        if self._shielded:
            self._waiting = name
        else:
            self._stop(name)

    def _stop(self, name: str) -> None:
        before, self._raised_s = self._raised_s, time.monotonic()
        if self._raised_s - before > REPEAT_S:
            raise _Interrupt(f"stopped by {name}")
