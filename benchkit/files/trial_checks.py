"""What the tables of a stage file's trials must agree with."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from benchkit.files.stage import StageFile

MEASURED_IN = {
    "leakage_max_A": "reverse",
    "guarded_reverse_max_V": "reverse",
    "on_from_max_V": "supply_sweep",
    "useful_from_max_V": "supply_sweep",
    "gate_margin_min_V": "supply_sweep",
    "fuse_clears_max_s": "fused_trial",
    "clamp_peak_max_V": "fused_trial",
    "battery_current_max_A": "battery_trial",
}
"""Limits that only one trial measures, and its table."""


def check_trials(file: StageFile) -> None:
    """ValueError with a plain sentence where a trial's table, or a limit on it, cannot be."""
    for key, table in MEASURED_IN.items():
        if getattr(file.limits, key) is not None and getattr(file, table) is None:
            raise ValueError(f"limits.{key} needs a [{table}] table, or it is never measured")
    _told_apart(file)
    _swept(file)
    _fused(file)


def _told_apart(file: StageFile) -> None:
    """A limit that a short circuit in the part's place would keep is none."""
    reverse, limits = file.reverse, file.limits
    if reverse is None:
        return
    full = file.stage.supply_max_V if reverse.voltage_V is None else reverse.voltage_V
    below, leaks = limits.guarded_reverse_max_V, limits.leakage_max_A
    if below is not None and below >= full:
        raise ValueError(
            f"limits.guarded_reverse_max_V is {below:g}: it must be below the full reverse "
            f"voltage of {full:g} V, or a short circuit would keep it; volts, not millivolts"
        )
    if leaks is not None and leaks >= reverse.current_limit_A:
        raise ValueError(
            f"limits.leakage_max_A is {leaks:g}: it must be below reverse.current_limit_A "
            f"{reverse.current_limit_A:g}, beyond which nothing flows; amperes, not "
            "milliamperes"
        )


def _swept(file: StageFile) -> None:
    """A supply sweep stays inside the stage's own range, and is asked what it measures."""
    settings, working = file.supply_sweep, file.stage
    if settings is None:
        return
    top = settings.voltages_V[-1]
    if not working.supply_min_V <= top <= working.supply_max_V:
        raise ValueError(
            f"supply_sweep.voltages_V ends at {top:g}: it must end between stage.supply_min_V "
            f"{working.supply_min_V:g} and stage.supply_max_V {working.supply_max_V:g}"
        )
    amps = settings.current_A or working.current_nominal_A
    if amps > working.current_max_A:
        raise ValueError(
            f"supply_sweep.current_A is {amps:g}: it must not be above "
            f"stage.current_max_A {working.current_max_A:g}"
        )
    judged = any(abs(limit.current_A / amps - 1) < 1e-6 for limit in file.limits.drop)
    if file.limits.useful_from_max_V is not None and not judged:
        raise ValueError(
            "limits.useful_from_max_V needs a limit in limits.drop at the current of the "
            f"supply sweep, {amps:g} A: that limit is what it is useful by"
        )


def _fused(file: StageFile) -> None:
    topology = file.stage.topology
    if file.fused_trial is None:
        return
    if topology != "fused-clamp":
        raise ValueError(
            f'fused_trial is given, but stage.topology is "{topology}": only a fused-clamp has '
            "a fuse that opens through its clamp; leave [fused_trial] out"
        )
    if file.reverse is None:
        raise ValueError(
            "fused_trial needs a [reverse] table: the clamp's leakage and drop, before and "
            "after, show whether blowing the fuse hurt it"
        )
