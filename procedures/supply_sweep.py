"""Supply sweep: drop and gate voltage at one current, the supply voltage lowered step by step."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchkit.guard import Envelope
from benchkit.harness import Harness
from benchkit.prefixes import spoken
from procedures.cooling import COOL_K, cool
from procedures.supply_sweep_plan import READINGS, Rung, SupplySweepPlan
from procedures.sweep import TURN_BACK_K, read_drop
from procedures.trial import Run, Step, feeding

ENDS = "supply-sweep-ends"
"""Kind of the remark that says where the sweep ended, when not at the lowest voltage listed."""
SHORT_SHARE = 0.05
"""A load that draws less than it was told to by more than this does not draw its current: several
times what loads and shunts are off (judgement)."""

PORTS = ("exposed_voltage", "guarded_voltage")


@dataclass(frozen=True)
class SupplySweepTrial:
    """The sweep of one board, as planned."""

    plan: SupplySweepPlan
    fuses_at_risk: int = 0

    @property
    def steps(self) -> tuple[Step, ...]:
        """See ``Trial``."""
        cold = f"nothing on, until the case is within {COOL_K:g} K of where it was at rest"
        return (
            Step("cool", cold, self.plan.cool_s),
            Step("supply sweep", self.plan.text(), self.plan.rungs_s),
        )

    @property
    def cautions(self) -> tuple[str, ...]:
        """See ``Trial``."""
        return (self.plan.caution,)

    @property
    def envelopes(self) -> tuple[Envelope, ...]:
        """See ``Trial``."""
        return tuple(rung.envelope for rung in self.plan.rungs)

    @property
    def harnesses(self) -> tuple[Harness, ...]:
        """See ``Trial``: the leads stay at home."""
        return ()

    def do(self, run: Run) -> None:
        """Every voltage from the highest down, off between them."""
        guard, plan = run.guard, self.plan
        cool(run)
        guard.expect("exposed_current", plan.current_A)
        for point in (*PORTS, *(("gate_voltage",) if plan.reads_gate else ())):
            guard.expect(point, plan.rungs[0].envelope.over_voltage_V)
        ended = ""
        with run.screen.progress("supply sweep", plan.rungs_s):
            began = guard.now()
            for rung in plan.rungs:
                if ended := _too_warm(run, rung) or _measure(run, plan, rung):
                    break
                run.screen.advance(guard.now() - began)
        if told := ended or plan.left_out:
            guard.remark(ENDS, told)


def _too_warm(run: Run, rung: Rung) -> str:
    """Why the step is not begun, if it is not."""
    warm, most = run.guard.latest_case_C(), rung.envelope.case_max_C - TURN_BACK_K
    if warm <= most:
        return ""
    return f"it ended above {rung.voltage_V:g} V: the case was at {warm:.1f} C, above {most:.0f} C"


def _measure(run: Run, plan: SupplySweepPlan, rung: Rung) -> str:
    """One voltage; why the sweep ends with it, "" where it goes on.

    What a stage does that is no longer on is expected here: it ends the sweep, and trips nothing.
    """
    guard, envelope = run.guard, rung.envelope
    guard.step("supply sweep")
    guard.sleep(run.bench.bench.settle_s)  # the load has just let go
    currents = []
    with feeding(run, envelope, plan.caution) as feed:
        live = feed.live
        feed.draw(plan.current_A)
        live.wait(run.bench.bench.settle_s)
        guard.step(f"supply/{rung.voltage_V!r}")
        guard.expect("drop", rung.largest_drop_V)
        for _ in range(READINGS):
            drop = read_drop(guard, live)
            currents.append(abs(live.read("exposed_current").value))
            exposed, guarded = (live.read(point).value for point in PORTS)
            live.check_ports(exposed, guarded, drop)
            if plan.reads_gate:
                live.read("gate_voltage")
            if not (burnt := abs(drop) * currents[-1]) <= envelope.loss_max_W:
                return (
                    f"it ended at {rung.voltage_V:g} V: the stage burnt {burnt:.3g} W there, more "
                    f"than {envelope.loss_max_W:.3g} W"
                )
        live.read("case")
        guard.step("supply sweep")
    carried = float(np.mean(currents))
    if not carried >= (1 - SHORT_SHARE) * plan.current_A:
        return (
            f"it ended at {rung.voltage_V:g} V: the stage carried {spoken(carried, 'A')} there, "
            f"and the load was told to draw {plan.current_A:g} A"
        )
    return ""
