"""Reverse trial: the supply's leads crossed at the exposed port, the voltage raised in steps."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from contextlib import contextmanager

from benchkit.errors import LinkError, OperatorStopped, Refused, Tripped
from benchkit.files import BenchFile
from benchkit.guard import Guard, Live
from benchkit.harness import DRAWING, reversed_harness
from procedures.plan import ZEROS, Plan
from procedures.reverse_plan import (
    COOL_GAP_S,
    COOL_K,
    POINTS,
    READINGS,
    ReversePlan,
    watched_s,
)
from procedures.screen import Screen
from procedures.sweep import read_drops

RUN_DOWN = "reverse"
"""The step of what is read while a rung runs down."""
LEFT = (
    "THE SUPPLY'S LEADS ARE STILL CROSSED at the exposed port, as far as is known. Before the "
    f"bench is used for anything else, with everything off: {DRAWING.sentence()}"
)


def run_reverse(
    guard: Guard,
    bench: BenchFile,
    plan: Plan,
    carried_A: Sequence[float],
    rest_K: float,
    screen: Screen,
) -> None:
    """Do the trial, and the forward drop again after it.

    carried_A: the currents that the sweep reached. rest_K: what the case read above ambient before
    it.
    """
    trial = plan.reverse
    if trial is None:
        return
    _cool(guard, trial, rest_K + COOL_K, screen)
    try:
        with _crossed(guard, bench):
            _read_zeros(guard, trial)
            if guard.prove_polarity():
                _climb(guard, bench, trial, screen)
            else:
                guard.remark(
                    "reverse-conducts",
                    "with the leads crossed the stage conducts all that the supply gives at the "
                    "volt that proves polarity: it does not block, and no larger voltage was "
                    "applied",
                )
        _read_after(guard, bench, plan, trial, carried_A, screen)
    finally:
        if guard.maybe_crossed:
            screen.caution(LEFT)
            guard.remark("left-reversed", LEFT)


def _cool(guard: Guard, trial: ReversePlan, above_K: float, screen: Screen) -> None:
    """Let the case cool, nothing on: hands are about to reach in, and the drop is to be compared
    with that of a sweep that began cold."""
    guard.step("cool")
    began = guard.now()
    with screen.progress("cool", trial.cool_s):
        while guard.read("case").value - guard.read("ambient").value > above_K:
            if guard.now() - began > trial.cool_s:
                break
            screen.advance(guard.sleep(COOL_GAP_S) - began)


@contextmanager
def _crossed(guard: Guard, bench: BenchFile) -> Iterator[None]:
    """The leads are crossed in here, and put back at the end.

    After a trip or a refusal too: what stopped is about the board, and the next one wants the leads
    the right way round. After anything else nobody is asked.
    """
    try:
        guard.step("leads crossed")
        guard.arrange(reversed_harness(bench.bench.bleeder_ohm))
        yield
        guard.step("leads put back")
        guard.arrange(DRAWING)
    except (Tripped, Refused) as stopped:
        if guard.harness.crossed and guard.confirmed_off:
            guard.step("leads put back")
            try:
                guard.arrange(DRAWING)
                guard.prove_polarity()
            except (OperatorStopped, Refused, Tripped, LinkError) as also:
                # What stopped the trial is what the run is about.
                guard.remark("not-put-back", str(also))
                raise stopped from also
        raise


def _read_zeros(guard: Guard, trial: ReversePlan) -> None:
    """Ranges for the trial, then what the points read on them with nothing on."""
    guard.expect("exposed_current", trial.largest_A)
    for point in ("exposed_voltage", "guarded_voltage", "drop"):
        guard.expect(point, trial.rungs[-1].over_voltage_V)
    guard.step("zero/reverse")
    for _ in range(ZEROS):
        for point in ("exposed_current", "exposed_voltage", "guarded_voltage"):
            guard.read(point)


def _climb(guard: Guard, bench: BenchFile, trial: ReversePlan, screen: Screen) -> None:
    """Every rung, with everything off between them: a voltage is never raised on a part that has
    just begun to give way."""
    caution: str | None = trial.caution
    with screen.progress("reverse trial", trial.rungs_s):
        began = guard.now()
        for rung in trial.rungs:
            guard.step(f"reverse/{rung.voltage_V!r}")
            with guard.energised(rung, caution) as live:
                caution = None
                live.wait(bench.bench.settle_s + watched_s(guard.ceilings.poll_s))
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


def _read_after(
    guard: Guard,
    bench: BenchFile,
    plan: Plan,
    trial: ReversePlan,
    carried_A: Sequence[float],
    screen: Screen,
) -> None:
    """The forward drop again, as the sweep read it."""
    for point in ("exposed_voltage", "guarded_voltage"):
        guard.expect(point, math.inf)
    guard.prove_polarity()
    guard.expect("drop", plan.largest_drop_V)
    guard.expect("exposed_current", trial.drops_A[-1])
    guard.step("after")
    currents = [amps for amps in trial.drops_A if amps in carried_A]
    read_drops(guard, "after", currents, trial.after, plan.cautions[0], bench, screen)
