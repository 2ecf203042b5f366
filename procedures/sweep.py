"""Forward sweep: drop against current, up and then down, between zero readings."""

from __future__ import annotations

from benchkit.files import BenchFile, StageFile
from benchkit.guard import Envelope, Guard, Live
from procedures.plan import REST_GAP_S, REST_READINGS, ZEROS, Plan
from procedures.screen import Screen

ZERO_V = 0.005
"""Ports within this of zero volts are dead enough for a zero reading."""
DISCHARGE_S = 20.0
TURN_BACK_K = 10.0
"""The sweep turns back this far below the case temperature that would trip."""


def read_rest(guard: Guard) -> float:
    """Case and ambient while nothing is on: they show how far the two sensors are apart. Returns
    the mean of what the case reads above ambient, in K."""
    guard.step("rest")
    apart = 0.0
    for _ in range(REST_READINGS):
        apart += guard.read("case").value - guard.read("ambient").value
        guard.sleep(REST_GAP_S)
    return apart / REST_READINGS


def read_zeros(guard: Guard, when: str, largest_drop_V: float, largest_A: float) -> None:
    """Drop and current on the ranges of the sweep, with nothing flowing."""
    guard.step(f"discharge/{when}")
    began = guard.now()
    while max(abs(guard.read(p).value) for p in ("exposed_voltage", "guarded_voltage")) > ZERO_V:
        if guard.now() - began > DISCHARGE_S:
            break  # the evaluation sees zeros that are none, and does not use them
        guard.sleep(0.1)
    guard.step(f"zero/{when}")
    guard.expect("drop", largest_drop_V)
    guard.expect("exposed_current", largest_A)
    for _ in range(ZEROS):
        guard.read("drop")
        guard.read("exposed_current")


def run_sweep(
    guard: Guard, stage: StageFile, bench: BenchFile, plan: Plan, screen: Screen
) -> list[float]:
    """Do the sweep and both sets of zeros; returns the currents that every way up reached."""
    currents = stage.sweep.currents_A
    read_zeros(guard, "before", plan.largest_drop_V, currents[-1])
    total = 2 * len(currents) * stage.sweep.repeats
    reached = len(currents)
    guard.step("forward sweep")
    with (
        screen.progress("forward sweep", total),
        guard.energised(plan.sweep, plan.cautions[0]) as live,
    ):
        live.wait(bench.bench.settle_s)
        done = 0
        for repeat in range(1, stage.sweep.repeats + 1):
            top = _way(guard, live, f"sweep/{repeat}/up", currents, bench, screen, done)
            reached = min(reached, top)
            _way(
                guard,
                live,
                f"sweep/{repeat}/down",
                currents[:top][::-1],
                bench,
                screen,
                done + len(currents),
            )
            done += 2 * len(currents)
        live.rest()
    read_zeros(guard, "after", plan.largest_drop_V, currents[-1])
    return currents[:reached]


def read_drops(
    guard: Guard,
    name: str,
    currents: list[float],
    envelope: Envelope,
    caution: str,
    bench: BenchFile,
    screen: Screen,
) -> None:
    """The drop at a few currents, on the ranges in force, in steps ``name/current``."""
    with screen.progress(name, len(currents)), guard.energised(envelope, caution) as live:
        live.wait(bench.bench.settle_s)
        _way(guard, live, name, currents, bench, screen, 0)
        live.rest()


def _way(
    guard: Guard,
    live: Live,
    name: str,
    currents: list[float],
    bench: BenchFile,
    screen: Screen,
    done: int,
) -> int:
    """One way through the currents; returns how many were reached before it was too warm."""
    for number, current in enumerate(currents, start=1):
        guard.step(f"{name}/{current!r}")
        live.draw(current)
        live.wait(bench.bench.settle_s)
        drop = _drop(guard, live)
        amps = live.read("exposed_current").value
        live.check_loss(drop, amps)
        screen.advance(done + number)
        warm = guard.latest_case_C()
        if name.endswith("up") and warm > live.envelope.case_max_C - TURN_BACK_K:
            guard.remark(
                "sweep-cut",
                f"the sweep turned back at {current:g} A: the case was at {warm:.1f} C",
            )
            return number
    return len(currents)


def _drop(guard: Guard, live: Live) -> float:
    """A drop reading on the sweep's range, or on a larger one for a part that drops too much."""
    reading = guard.read("drop")
    while reading.status == "overload" and reading.range < live.envelope.voltage_V:
        guard.expect("drop", 1.01 * reading.range)
        reading = guard.read("drop")
    return reading.value if reading.usable else live.read("drop").value
