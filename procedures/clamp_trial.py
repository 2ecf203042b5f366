"""The trial of a clamp: its leakage the right way round, and its drop the wrong way round."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from benchkit.errors import Refused
from benchkit.evaluation.clamp_trial_read import FLOWS, SHORT_V
from benchkit.guard import Envelope, Guard, Live
from benchkit.guard.envelope import PROOF_V
from benchkit.harness import Harness
from procedures.clamp_trial_plan import (
    CROSSED,
    FIRST_V,
    LEAKING,
    POINTS,
    READINGS,
    RISE_V,
    ClampPlan,
)
from procedures.cooling import cool
from procedures.rewired import rewired
from procedures.trial import ZEROS, Run, Step

NEAR = 0.8
"""A gentle drop is read once this share of its current flows."""
STEEPEST_V = 0.025
"""A junction's current grows by a factor of e with this at least (kT/q, ideality 1)."""
SEEN_SHARE = 0.05
"""Of its current: less may be the meter's offset."""


@dataclass(frozen=True)
class ClampTrial:
    """The trial of one board, as planned."""

    plan: ClampPlan
    fuses_at_risk: int = 0

    @property
    def steps(self) -> tuple[Step, ...]:
        """See ``Trial``."""
        return tuple(self.plan.steps())

    @property
    def cautions(self) -> tuple[str, ...]:
        """See ``Trial``."""
        return self.plan.leakage_caution, self.plan.crossed_caution

    @property
    def envelopes(self) -> tuple[Envelope, ...]:
        """See ``Trial``."""
        return self.plan.leakage, *self.plan.drops

    @property
    def harnesses(self) -> tuple[Harness, ...]:
        """See ``Trial``."""
        return LEAKING, CROSSED

    def do(self, run: Run) -> None:
        """Leakage, then drop: a clamp that is a short shows where it does no harm."""
        cool(run)
        with rewired(run) as move:
            move("supply at the exposed port", LEAKING)
            read_leakage(run, self.plan, "before")
            move("leads crossed", CROSSED)
            read_clamp_drop(run, self.plan, "before")


def read_leakage(run: Run, plan: ClampPlan, when: str) -> None:
    """What flows into the exposed port the right way round, in step ``clamp/<when>/leakage``."""
    guard, envelope = run.guard, plan.leakage
    _read_zeros(guard, f"clamp/{when}/zero-leakage", 2 * envelope.current_limit_A, envelope)
    guard.prove_polarity(plan.leakage_caution)
    guard.step(f"clamp/{when}/leakage")
    with guard.energised(envelope, plan.leakage_caution) as live:
        live.wait(plan.settle_s)
        for _ in range(READINGS):
            _read(live)


def read_clamp_drop(run: Run, plan: ClampPlan, when: str) -> bool:
    """The drop at each current, in steps ``clamp/<when>/drop/<current>``, the leads crossed.

    Returns whether it conducts, and drops like a junction: only then is more driven through it.
    """
    guard = run.guard
    _read_zeros(guard, f"clamp/{when}/zero-drop", plan.largest_A, plan.drops[-1])
    if plan.gentle:
        return _approach(run, plan, when)
    # A clamp may drop more than the volt that proves polarity: the first rung tells.
    guard.prove_polarity(plan.crossed_caution)
    with run.screen.progress("clamp drop", len(plan.drops)):
        for number, rung in enumerate(plan.drops, start=1):
            below_V, amps = _rung(run, plan, rung, f"clamp/{when}/drop/{rung.current_limit_A!r}")
            run.screen.advance(number)
            alike = SHORT_V < below_V < -plan.drops[-1].guarded_min_V
            if not alike or amps < FLOWS * rung.current_limit_A:
                guard.remark(
                    "clamp-cut",
                    f"the drop of the clamp was not asked at more than {rung.current_limit_A:g} A: "
                    f"the guarded port was {below_V:.3g} V below zero",
                )
                return False
    return True


def _rung(run: Run, plan: ClampPlan, envelope: Envelope, step: str) -> tuple[float, float]:
    """One energised step; returns how far below zero the guarded port was, and what flowed."""
    run.guard.step(step)
    with run.guard.energised(envelope, plan.crossed_caution) as live:
        live.wait(plan.settle_s)
        found = [_read(live) for _ in range(READINGS)]
    below_V, amps = (
        -sum(each[point] for each in found) / READINGS
        for point in ("guarded_voltage", "exposed_current")
    )
    return below_V, amps


def _approach(run: Run, plan: ClampPlan, when: str) -> bool:
    """Up to the full current by voltage, for a supply that trips at its current limit: never by
    more than a junction could answer with that limit.

    No step is more than a proof of polarity is, which such a supply would end by tripping: the
    first of them shows which way round the leads are, or Refused.
    """
    [envelope] = plan.drops
    target_A = plan.full_A
    volts, amps, settle_s = FIRST_V, 0.0, run.bench.bench.settle_s
    with run.screen.progress("clamp drop", PROOF_V - FIRST_V):
        while True:
            run.guard.step(f"clamp/{when}/approach")
            with run.guard.energised(_at(envelope, volts), plan.crossed_caution) as live:
                live.wait(settle_s)
                found = _read(live)
            amps = -found["exposed_current"]
            if not found["exposed_voltage"] < 0:
                raise Refused(
                    f"with {volts:g} V set and the leads to be crossed, exposed_voltage reads "
                    f"{found['exposed_voltage']:.3g} V: the leads are not crossed, or not connected"
                )
            run.screen.advance(volts - FIRST_V)
            if amps >= NEAR * target_A or volts >= PROOF_V:
                break
            rise_V = (
                STEEPEST_V * math.log(target_A / amps) if amps > SEEN_SHARE * target_A else RISE_V
            )
            volts = min(volts + max(rise_V, 0.002), PROOF_V)
    below_V, amps = _rung(run, plan, _at(envelope, volts), f"clamp/{when}/drop/{target_A!r}")
    return below_V > SHORT_V and amps >= FLOWS * target_A


def _at(envelope: Envelope, volts: float) -> Envelope:
    return replace(envelope, voltage_V=volts, over_voltage_V=1.1 * volts + 0.5)


def _read_zeros(guard: Guard, step: str, largest_A: float, envelope: Envelope) -> None:
    """Ranges for what follows, then what the points read on them with nothing on."""
    guard.expect("exposed_current", largest_A)
    for point in ("exposed_voltage", "guarded_voltage", "drop"):
        guard.expect(point, envelope.over_voltage_V)
    guard.step(step)
    for _ in range(ZEROS):
        for point in ("exposed_current", "exposed_voltage", "guarded_voltage"):
            guard.read(point)


def _read(live: Live) -> dict[str, float]:
    """One set of readings."""
    value = {point: live.read(point).value for point in POINTS}
    live.check_ports(value["exposed_voltage"], value["guarded_voltage"], value["drop"])
    live.check_loss(value["drop"], value["exposed_current"])
    return {str(point): found for point, found in value.items()}
