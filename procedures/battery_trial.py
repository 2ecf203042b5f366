"""Battery trial: a second supply stands for a battery at the exposed port, either way round."""

from __future__ import annotations

from dataclasses import dataclass

from benchkit.errors import Refused
from benchkit.evaluation.battery_trial import CONDUCTED, SKIPPED
from benchkit.evaluation.battery_trial_circuits import BACK, FLAT
from benchkit.guard import Envelope, Guard, Live
from benchkit.harness import Harness
from procedures.battery_trial_plan import POINTS, READINGS, BatteryPlan, StatePlan
from procedures.cooling import cool
from procedures.rewired import rewired
from procedures.sweep import DISCHARGE_S, ZERO_V
from procedures.trial import ZEROS, Run, Step

RUN_DOWN = "battery"
"""The step of what is read while a state runs down."""


@dataclass(frozen=True)
class BatteryTrialRun:
    """The trial of one board, as planned."""

    plan: BatteryPlan
    fuses_at_risk: int = 0

    @property
    def steps(self) -> tuple[Step, ...]:
        """See ``Trial``."""
        return tuple(self.plan.steps())

    @property
    def cautions(self) -> tuple[str, ...]:
        """See ``Trial``."""
        return tuple(state.caution for state in self.plan.states)

    @property
    def envelopes(self) -> tuple[Envelope, ...]:
        """See ``Trial``."""
        return tuple(envelope for state in self.plan.states for envelope in state.envelopes)

    @property
    def harnesses(self) -> tuple[Harness, ...]:
        """See ``Trial``."""
        return tuple(state.harness for state in self.plan.states)

    def do(self, run: Run) -> None:
        """Every state in turn, and the leads put back."""
        cool(run)
        with rewired(run) as move, run.screen.progress("battery trial", len(self.plan.states)):
            for number, state in enumerate(self.plan.states, start=1):
                move(f"battery/leads/{state.name}", state.harness)
                _read_zeros(run.guard, self.plan, state)
                _do(run, self.plan, state)
                _discharge(run.guard)
                run.screen.advance(number)


def _do(run: Run, plan: BatteryPlan, state: StatePlan) -> None:
    """One state. A stage that conducts at the proof is asked for more where it is predicted to do
    so only: what blocks by its datasheets, and does not, is broken already."""
    guard = run.guard
    blocks = guard.prove_polarity(state.caution)
    if not blocks and not state.conducts:
        guard.remark(
            CONDUCTED,
            "with the leads crossed the stage conducts all that the stand-in gives at the volt "
            f"that proves polarity: it does not block, and {state.name} was not asked for more",
        )
        return
    for volts, envelope in zip(state.volts, state.envelopes, strict=True):
        try:
            flowing_A = _stand(run, plan, state, volts, envelope)
        except Refused as refused:
            if blocks or "has not been proved" not in str(refused):
                raise
            # A stand-in that trips at the proof shows no direction: then the guard allows no more.
            guard.remark(SKIPPED, str(refused))
            return
        if state.name == FLAT and flowing_A >= plan.around.flows_A(FLAT):
            return


def _stand(
    run: Run, plan: BatteryPlan, state: StatePlan, volts: float, envelope: Envelope
) -> float:
    """One energised step; returns the largest current out of the battery, or into a flat one."""
    guard, settle_s = run.guard, run.bench.bench.settle_s
    guard.step(f"battery/{state.name}/alone" if state.equipment_on else "battery/settling")
    with guard.energised(envelope, state.caution) as live:
        live.wait(settle_s)
        if state.equipment_on:
            live.connect("battery")
            guard.step("battery/settling")
            live.wait(settle_s)
        # The guard looks at the two ports by turns: both are seen before anything is relied on.
        live.wait(2 * guard.ceilings.poll_s)
        guard.step(f"battery/{state.name}/{volts!r}")
        amps = max(_read(live, state.name) for _ in range(READINGS))
        if state.name not in (FLAT, BACK) and amps >= plan.around.flows_A(state.name):
            guard.remark(
                CONDUCTED,
                f"{state.name}: {amps:.3g} A flow out of the battery, so it was not kept on",
            )
        elif state.name != FLAT and plan.dwell_s:
            _dwell(guard, live, state.name, plan.dwell_s)
        guard.step(RUN_DOWN)
    return amps


def _dwell(guard: Guard, live: Live, name: str, seconds: float) -> None:
    guard.step(f"battery/{name}/dwell")
    now = guard.now()
    until = now + seconds
    while until - now > 1e-6:
        now = live.wait(min(guard.ceilings.poll_s, until - now))
        _read(live, name)
        now = guard.now()


def _read(live: Live, name: str) -> float:
    """One set of readings; returns the current out of the battery, or into a flat one."""
    value = {point: live.read(point).value for point in POINTS}
    live.check_ports(value["exposed_voltage"], value["guarded_voltage"], value["drop"])
    live.check_loss(value["drop"], value["exposed_current"])
    return value["exposed_current"] if name == BACK else -value["exposed_current"]


def _discharge(guard: Guard) -> None:
    """Let both ports run down: two that hold what is left of opposite voltages differ by both."""
    guard.step(RUN_DOWN)
    began = guard.now()
    ports = ("exposed_voltage", "guarded_voltage", "drop")
    while max(abs(guard.read(port).value) for port in ports) > ZERO_V:
        if guard.now() - began > DISCHARGE_S:
            break  # the guard touches no lead then, and says why
        guard.sleep(0.1)


def _read_zeros(guard: Guard, plan: BatteryPlan, state: StatePlan) -> None:
    """Ranges for the state, then what the points read on them with nothing on."""
    around = plan.around
    guard.expect("exposed_current", 2 * around.battery_A)
    for point in ("exposed_voltage", "guarded_voltage"):
        guard.expect(point, max(d.over_voltage_V for d in state.envelopes[-1].drives().values()))
    guard.expect("drop", around.emf_V + around.set_V)
    guard.step(f"zero/battery/{state.name}")
    for _ in range(ZEROS):
        for point in ("exposed_current", "exposed_voltage", "guarded_voltage"):
            guard.read(point)
