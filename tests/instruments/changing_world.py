"""A world whose voltages change with time, for the tests of timed bursts."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

from tests.instruments.simulated_fake import FakeWorld

Course = Callable[[str, float], float]


@dataclass
class ChangingWorld(FakeWorld):
    """Volts by probe and time since ``zero_s``; remembers every look at them."""

    course: Course = lambda probe, t: 0.0  # noqa: ARG005
    zero_s: float = 0.0
    looks: list[tuple[str, float]] = field(default_factory=list)

    def begin(self) -> None:
        """Time is counted from now on."""
        self.zero_s = self.now()
        self.looks.clear()

    def voltage(self, probe: str) -> float:
        t = self.now() - self.zero_s
        self.looks.append((probe, t))
        return self.course(probe, t)
