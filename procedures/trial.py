"""A run's parts: what each says before it is done, and what it works with."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Protocol

from benchkit.files import BenchFile
from benchkit.guard import Envelope, Guard, Live
from benchkit.harness import CHARGING, DRAWING, SENSED, Harness
from benchkit.records.run_folder import RunFolder
from benchkit.stage import Stage
from procedures.screen import Screen

ZEROS = 8
KICK_S = 0.1
"""How long a battery's stand-in stays connected, for a stage that waits for a battery to switch
itself on."""
SENSED_STAGES = ("pmos-sensed", "nmos-sensed")


@dataclass(frozen=True)
class Step:
    """One line of the plan."""

    name: str
    text: str
    seconds: float


@dataclass(frozen=True)
class Forward:
    """How the stage is driven the right way round.

    home: where supply and load are for it, and where they go back to. sweep: the envelope of the
    forward sweep.
    """

    home: Harness
    sweep: Envelope
    largest_drop_V: float
    caution: str


@dataclass
class Run:
    """What the parts of one board's run work with.

    rest_K: what the case read above ambient before anything was on. carried_A: the currents that
    the forward sweep reached.
    """

    guard: Guard
    stage: Stage
    bench: BenchFile
    forward: Forward
    folder: RunFolder
    screen: Screen
    rest_K: float = 0.0
    carried_A: list[float] = field(default_factory=list)


class Trial(Protocol):
    """A part of a run after sweep and soak: planned before anything is on, then done."""

    @property
    def steps(self) -> tuple[Step, ...]:
        """For the plan, in order."""

    @property
    def cautions(self) -> tuple[str, ...]:
        """What is asked before its energised steps."""

    @property
    def envelopes(self) -> tuple[Envelope, ...]:
        """Of its energised steps."""

    @property
    def harnesses(self) -> tuple[Harness, ...]:
        """How it has the leads connected, in order."""

    @property
    def fuses_at_risk(self) -> int:
        """How many it can cost."""

    def do(self, run: Run) -> None:
        """Do it, and leave the leads where they were."""


def home_of(stage: Stage) -> Harness:
    """Where supply and load are while the stage is driven the right way round."""
    if stage.guards == "load":
        return DRAWING
    return SENSED if stage.file.stage.topology in SENSED_STAGES else CHARGING


class Feed:
    """Current through the stage: what is drawn beside the load counts with it."""

    def __init__(self, live: Live, standing_A: float) -> None:
        self.live, self._standing_A = live, standing_A

    def draw(self, current_A: float) -> None:
        """Set the load so that the stage carries this."""
        self.live.draw(max(current_A - self._standing_A, 0.0))


@contextmanager
def feeding(run: Run, envelope: Envelope, caution: str | None) -> Iterator[Feed]:
    """Drive the stage the right way round.

    One that waits for a battery is shown one for KICK_S, by its stand-in; what the resistor across
    the stand-in draws from then on is measured once, in step ``standing``.
    """
    with run.guard.energised(envelope, caution) as live:
        live.wait(run.bench.bench.settle_s)
        standing_A = 0.0
        if envelope.beside is not None:
            live.connect("battery")
            live.wait(KICK_S)
            live.disconnect("battery")
            live.wait(run.bench.bench.settle_s)
            run.guard.step("standing")
            standing_A = abs(live.read("exposed_current").value)
        yield Feed(live, standing_A)
