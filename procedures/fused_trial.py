"""The fused trial: the full current the wrong way round blows the fuse; then a new one, and what
the clamp does after it."""

from __future__ import annotations

from dataclasses import dataclass

from benchkit.guard import Envelope, Guard
from benchkit.harness import Harness
from benchkit.reading import Reading
from procedures.clamp_trial import read_clamp_drop, read_leakage
from procedures.clamp_trial_plan import CROSSED, LEAKING
from procedures.cooling import cool
from procedures.fused_trial_plan import FusedPlan
from procedures.rewired import rewired
from procedures.trial import ZEROS, Run, Step

LAST = 5
"""The end of the burst is judged by its last so many readings of the current."""
STILL = 0.05
"""Of the current: with more than this at the end the fuse has not opened."""


@dataclass(frozen=True)
class FusedTrial:
    """The trial of one board, as planned."""

    plan: FusedPlan
    fuses_at_risk: int = 1

    @property
    def steps(self) -> tuple[Step, ...]:
        """See ``Trial``."""
        return tuple(self.plan.steps())

    @property
    def cautions(self) -> tuple[str, ...]:
        """See ``Trial``."""
        return (self.plan.caution,)

    @property
    def envelopes(self) -> tuple[Envelope, ...]:
        """See ``Trial``."""
        return (self.plan.blow,)

    @property
    def harnesses(self) -> tuple[Harness, ...]:
        """See ``Trial``."""
        return CROSSED, LEAKING

    def do(self, run: Run) -> None:
        """Blow it, have a new one put in, and read the clamp again."""
        guard, plan = run.guard, self.plan
        cool(run)
        with rewired(run) as move:
            move("leads crossed", CROSSED)
            guard.declare_fuse(plan.coordination)
            _read_zeros(guard, plan)
            guard.prove_polarity(plan.caution)
            if not _blow(run, plan):
                guard.remark(
                    "fuse-stayed",
                    f"{plan.fuse} had not opened at the end of the burst: the output was switched "
                    "off, and no new fuse was asked for",
                )
                return
            guard.step("new fuse")
            guard.refit_fuse(plan.fuse)
            cool(run)
            if read_clamp_drop(run, plan.clamp, "after"):
                move("supply at the exposed port", LEAKING)
                read_leakage(run, plan.clamp, "after")


def _read_zeros(guard: Guard, plan: FusedPlan) -> None:
    """The ranges of the burst, and what its points read on them with nothing on."""
    burst = plan.blow.burst
    assert burst is not None
    for point, largest in burst.points:
        guard.expect(point, largest)
    guard.step("fused/zero")
    for _ in range(ZEROS):
        for point, _ in burst.points:
            guard.read(point)


def _blow(run: Run, plan: FusedPlan) -> bool:
    """One energised step, in step ``fused/burst``; returns whether the fuse opened."""
    guard = run.guard
    guard.step("fused/burst")
    with guard.energised(plan.blow, plan.caution) as live:
        readings = live.burst()
    return opened(readings, plan.current_A)


def opened(readings: list[Reading], current_A: float) -> bool:
    """Whether a burst's current was over at its end, and had been there."""
    amps = [abs(r.value) for r in readings if r.point == "exposed_current" and r.usable]
    return bool(amps) and max(amps) > STILL * current_A and max(amps[-LAST:]) < STILL * current_A
