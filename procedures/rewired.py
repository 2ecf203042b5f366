"""Leads moved for a trial, and back home after it."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from benchkit.errors import LinkError, OperatorStopped, Refused, Tripped
from benchkit.guard import Guard
from benchkit.harness import Harness
from procedures.trial import Run

BACK = "leads put back"
Move = Callable[[str, Harness], None]
"""Takes the name of the step and how the leads are to be."""


@contextmanager
def rewired(run: Run) -> Iterator[Move]:
    """Leads may be moved in here, by what it gives; at the end they are put back and proved.

    After a trip or a refusal too: what stopped is about the board, and the next one wants the leads
    at home. After anything else nobody is asked. Leads that may be left crossed are the last words.
    """
    guard, home = run.guard, run.forward.home

    def move(name: str, harness: Harness) -> None:
        guard.step(name)
        guard.arrange(harness)

    try:
        yield move
        move(BACK, home)
        _widest(guard)
        guard.prove_polarity(run.forward.caution)
    except (Tripped, Refused) as stopped:
        if guard.harness != home and guard.confirmed_off:
            try:
                move(BACK, home)
                _widest(guard)
                guard.prove_polarity(run.forward.caution)
            except (OperatorStopped, Refused, Tripped, LinkError) as also:
                # What stopped the trial is what the run is about.
                guard.remark("not-put-back", str(also))
                raise stopped from also
        raise
    finally:
        if guard.maybe_crossed:
            left = left_crossed(home)
            run.screen.caution(left)
            guard.remark("left-reversed", left)


def left_crossed(home: Harness) -> str:
    """The last words of a run that was broken off with the leads crossed."""
    return (
        "LEADS ARE STILL CROSSED at the exposed port, as far as is known. Before the bench is used "
        f"for anything else, with everything off: {home.sentence()}"
    )


def _widest(guard: Guard) -> None:
    """Ports may hold anything: read them on the largest range."""
    for point in ("exposed_voltage", "guarded_voltage", "drop"):
        guard.expect(point, math.inf)
