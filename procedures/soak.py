"""Soak: temperature against time at constant current, ended once the final rise is known."""

from __future__ import annotations

import numpy as np

from benchkit.evaluation.soak import heating_of, read_rest
from benchkit.evaluation.sweep import drop_at, read_sweep
from benchkit.guard import Envelope
from benchkit.records.record import read_record
from procedures.trial import Run, feeding

LOOK_AT_FIT_S = 10.0
SLOW_EVERY = 5
"""Drop, current and ambient move slowly: they are read at every so many looks."""


def run_soak(run: Run, envelope: Envelope | None, stop_C: float) -> None:
    """Soak, unless the measured loss says that the part would get hotter than ``stop_C``."""
    settings, heat = run.stage.file.soak, run.stage.file.heat
    if settings is None or envelope is None:
        return
    guard, bench, screen = run.guard, run.bench, run.screen
    record = read_record(run.folder.path)
    sweep = read_sweep(record)
    if sweep is None:
        return
    nearest = min(sweep.targets, key=lambda a: abs(a - settings.current_A))
    loss = drop_at(sweep, bench, nearest).drop_V / nearest * settings.current_A**2
    forecast = sweep.ambient_C + heat.case_to_ambient_max_K_per_W * loss
    if forecast > stop_C:
        guard.remark(
            "soak-skipped",
            f"heat: the loss of {loss:.2g} W that the sweep measured could take the case to "
            f"{forecast:.0f} C at {settings.current_A:g} A, beyond {stop_C:.0f} C, so "
            "the soak was left out",
        )
        return
    rest = read_rest(record)
    times: list[float] = []
    case: list[float] = []
    ambient: list[float] = []
    guard.step("soak")
    with (
        screen.progress("soak", settings.longest_s),
        feeding(run, envelope, run.forward.caution) as feed,
    ):
        live = feed.live
        ambient_now = live.read("ambient").value
        guard.step("soak")
        feed.draw(settings.current_A)
        began = guard.now()
        guard.remark("soak-begins", f"{settings.current_A:g} A")
        next_fit = 3 * LOOK_AT_FIT_S
        age = 0.0
        while age < settings.longest_s:
            age = live.wait(guard.ceilings.poll_s) - began
            times.append(live.looked_s - began)
            case.append(guard.latest_case_C())
            if len(times) % SLOW_EVERY == 1:
                drop = live.read("drop").value
                live.check_loss(drop, live.read("exposed_current").value)
                ambient_now = live.read("ambient").value
            ambient.append(ambient_now)
            screen.advance(age)
            if age >= next_fit:
                next_fit = age + LOOK_AT_FIT_S
                heating = heating_of(
                    bench,
                    np.array(times),
                    np.array(case),
                    np.array(ambient),
                    rest,
                    heat.time_constant_s,
                )
                if heating.known_within(settings.known_within_K):
                    break
        live.rest()
