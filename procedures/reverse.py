"""Reverse trial: the supply's leads crossed at the exposed port, the voltage raised in steps."""

from __future__ import annotations

from dataclasses import dataclass

from benchkit.guard import Envelope, Guard, Live
from benchkit.harness import Harness
from procedures.cooling import cool
from procedures.reverse_plan import POINTS, READINGS, ReversePlan, steps_around, watched_s
from procedures.rewired import rewired
from procedures.sweep import read_drops
from procedures.trial import ZEROS, Run, Step

RUN_DOWN = "reverse"
"""The step of what is read while a rung runs down."""


@dataclass(frozen=True)
class ReverseTrial:
    """The trial of one board, as planned."""

    plan: ReversePlan
    fuses_at_risk: int = 0

    @property
    def steps(self) -> tuple[Step, ...]:
        """See ``Trial``."""
        return tuple(Step(*step) for step in steps_around(self.plan))

    @property
    def cautions(self) -> tuple[str, ...]:
        """See ``Trial``."""
        return (self.plan.caution,)

    @property
    def envelopes(self) -> tuple[Envelope, ...]:
        """See ``Trial``."""
        return (*self.plan.rungs, self.plan.after)

    @property
    def harnesses(self) -> tuple[Harness, ...]:
        """See ``Trial``."""
        return (self.plan.harness,)

    def do(self, run: Run) -> None:
        """The ladder, and the forward drop again after it."""
        guard, trial = run.guard, self.plan
        cool(run)
        with rewired(run) as move:
            move("leads crossed", trial.harness)
            _read_zeros(guard, trial)
            if guard.prove_polarity(trial.caution):
                _climb(run, trial)
            else:
                guard.remark(
                    "reverse-conducts",
                    "with the leads crossed the stage conducts all that the supply gives at the "
                    "volt that proves polarity: it does not block, and no larger voltage was "
                    "applied",
                )
        _read_after(run, trial)


def _read_zeros(guard: Guard, trial: ReversePlan) -> None:
    """Ranges for the trial, then what the points read on them with nothing on."""
    guard.expect("exposed_current", trial.largest_A)
    for point in ("exposed_voltage", "guarded_voltage", "drop"):
        guard.expect(point, trial.rungs[-1].over_voltage_V)
    guard.step("zero/reverse")
    for _ in range(ZEROS):
        for point in ("exposed_current", "exposed_voltage", "guarded_voltage"):
            guard.read(point)


def _climb(run: Run, trial: ReversePlan) -> None:
    """Every rung, with everything off between them: a voltage is never raised on a part that has
    just begun to give way."""
    guard, screen = run.guard, run.screen
    with screen.progress("reverse trial", trial.rungs_s):
        began = guard.now()
        for rung in trial.rungs:
            guard.step(f"reverse/{rung.voltage_V!r}")
            with guard.energised(rung, trial.caution) as live:
                live.wait(run.bench.bench.settle_s + watched_s(guard.ceilings.poll_s))
                for _ in range(READINGS):
                    _read(live)
                if rung is trial.rungs[-1] and trial.dwell_s:
                    _dwell(guard, live, trial.dwell_s)
                guard.step(RUN_DOWN)
            screen.advance(guard.now() - began)


def _dwell(guard: Guard, live: Live, seconds: float) -> None:
    guard.step("reverse/dwell")
    now = guard.now()
    until = now + seconds
    while until - now > 1e-6:
        now = live.wait(min(guard.ceilings.poll_s, until - now))
        _read(live)
        now = guard.now()


def _read(live: Live) -> None:
    """One set of readings."""
    value = {point: live.read(point).value for point in POINTS}
    live.check_ports(value["exposed_voltage"], value["guarded_voltage"], value["drop"])
    live.check_loss(value["drop"], value["exposed_current"])


def _read_after(run: Run, trial: ReversePlan) -> None:
    """The forward drop again, as the sweep read it."""
    guard = run.guard
    guard.expect("drop", run.forward.largest_drop_V)
    guard.expect("exposed_current", run.stage.file.sweep.currents_A[-1])
    guard.step("after")
    currents = [amps for amps in trial.drops_A if amps in run.carried_A]
    read_drops(run, "after", currents, trial.after, run.forward.caution)
