"""Forward sweep: drop against current, up and then down, between zero readings."""

from __future__ import annotations

from benchkit.guard import Envelope, Guard, Live
from procedures.trial import ZEROS, Feed, Run, feeding

ZERO_V = 0.005
"""Ports within this of zero volts are dead enough for a zero reading."""
DISCHARGE_S = 20.0
REST_READINGS, REST_GAP_S = 8, 0.25
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


def run_sweep(run: Run) -> None:
    """Do the sweep and both sets of zeros; ``run.carried_A`` are the currents that every way up
    reached."""
    guard, screen, forward, sweep = run.guard, run.screen, run.forward, run.stage.file.sweep
    currents = sweep.currents_A
    read_zeros(guard, "before", forward.largest_drop_V, currents[-1])
    reached = len(currents)
    guard.step("forward sweep")
    with (
        screen.progress("forward sweep", 2 * len(currents) * sweep.repeats),
        feeding(run, forward.sweep, forward.caution) as feed,
    ):
        done = 0
        for repeat in range(1, sweep.repeats + 1):
            top = _way(run, feed, f"sweep/{repeat}/up", currents, done)
            reached = min(reached, top)
            _way(run, feed, f"sweep/{repeat}/down", currents[:top][::-1], done + len(currents))
            done += 2 * len(currents)
        feed.live.rest()
    read_zeros(guard, "after", forward.largest_drop_V, currents[-1])
    run.carried_A = currents[:reached]


def read_drops(
    run: Run, name: str, currents: list[float], envelope: Envelope, caution: str
) -> None:
    """The drop at a few currents, on the ranges in force, in steps ``name/current``."""
    with run.screen.progress(name, len(currents)), feeding(run, envelope, caution) as feed:
        _way(run, feed, name, currents, 0)
        feed.live.rest()


def _way(run: Run, feed: Feed, name: str, currents: list[float], done: int) -> int:
    """One way through the currents; returns how many were reached before it was too warm."""
    guard, live = run.guard, feed.live
    for number, current in enumerate(currents, start=1):
        guard.step(f"{name}/{current!r}")
        feed.draw(current)
        live.wait(run.bench.bench.settle_s)
        drop = read_drop(guard, live)
        amps = live.read("exposed_current").value
        live.check_loss(drop, amps)
        run.screen.advance(done + number)
        warm = guard.latest_case_C()
        if name.endswith("up") and warm > live.envelope.case_max_C - TURN_BACK_K:
            guard.remark(
                "sweep-cut",
                f"the sweep turned back at {current:g} A: the case was at {warm:.1f} C",
            )
            return number
    return len(currents)


def read_drop(guard: Guard, live: Live) -> float:
    """A drop reading on the range in force, or on a larger one for a part that drops too much."""
    reading = guard.read("drop")
    while reading.status == "overload" and reading.range < live.envelope.voltage_V:
        guard.expect("drop", 1.01 * reading.range)
        reading = guard.read("drop")
    return reading.value if reading.usable else live.read("drop").value
