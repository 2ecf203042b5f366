"""What must hold before anything is switched on: each check raises Refused and says what is wrong.

``read`` gives a usable reading of a point, or refuses.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Mapping

from benchkit.errors import Refused
from benchkit.files.guarding import Thresholds
from benchkit.guard.envelope import Drive
from benchkit.prediction.coordination import Coordination
from benchkit.protocols import Interlock

DEAD_POINTS = ("exposed_voltage", "guarded_voltage", "drop")
Read = Callable[[str], float]


def check_calibration(due: Mapping[str, dt.date], today: dt.date) -> None:
    """Every instrument's calibration is in date."""
    late = [f"{role} ({date})" for role, date in due.items() if date < today]
    if late:
        raise Refused(
            f"calibration is out of date: {', '.join(late)}; calibrate, or correct "
            "calibration_due in the bench file"
        )


def check_loop(interlock: Interlock | None) -> None:
    """The interlock loop is closed, where the bench has one."""
    if interlock is not None and not interlock.closed():
        raise Refused(
            f"the interlock loop is open ({interlock.role}): close the cover, then begin again"
        )


def check_fuse(declared: Coordination | None, drive: Drive, *, in_place: bool) -> None:
    """Full current the wrong way round needs a fuse: declared, coordinated at what is driven
    through it, and proved in place."""
    if declared is None:
        raise Refused("full current the wrong way round needs a fuse, and none was declared")
    if not declared.coordinated:
        raise Refused(f"the fuse is not coordinated: {'; '.join(declared.notes)}")
    amps, volts = drive.current_limit_A, drive.voltage_V
    if not declared.current_A * (1 - 1e-9) <= amps <= declared.prospective_A:
        raise Refused(
            f"the fuse was judged from {declared.current_A:g} to {declared.prospective_A:g} A, and "
            f"{amps:g} A are to be driven through it"
        )
    if not volts <= declared.voltage_V:
        raise Refused(f"the fuse was judged at {declared.voltage_V:g} V, and {volts:g} V are asked")
    if not in_place:
        raise Refused(
            "the fuse was not found in place: at the proof of polarity no current flowed through "
            "it and the clamp, so it is blown or missing, or the clamp is open"
        )


def check_dead(read: Read, thresholds: Thresholds) -> None:
    """Both ports are dead with everything off, by all three meter channels."""
    for point in DEAD_POINTS:
        value = read(point)
        if not abs(value) <= thresholds.residual_V:
            raise Refused(
                f"{point} is {value:.3g} V with everything off, above {thresholds.residual_V} V: "
                "something still feeds or charges it; disconnect and discharge it first"
            )


def check_sensors(read: Read, thresholds: Thresholds) -> None:
    """Case and ambient are plausible, and near each other at rest."""
    temps = {point: read(point) for point in ("case", "ambient")}
    low, high, most_K = thresholds.sensor_min_C, thresholds.sensor_max_C, thresholds.rest_K
    for point, value in temps.items():
        if not low <= value <= high:
            raise Refused(
                f"{point} reads {value:.1f} C at rest, outside {low:g} to {high:g} C: check the "
                "sensor"
            )
    if not abs(temps["case"] - temps["ambient"]) <= most_K:
        raise Refused(
            f"case reads {temps['case']:.1f} C and ambient {temps['ambient']:.1f} C at rest, more "
            f"than {most_K:g} K apart: let the board settle, or check the sensors"
        )
