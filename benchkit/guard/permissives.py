"""What must hold before anything is switched on: each check raises Refused and says what is wrong.

``read`` gives a usable reading of a point, or refuses.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Mapping

from benchkit.errors import Refused

RESIDUAL_V = 0.5
"""Below this a port counts as dead."""
REST_K = 10.0
"""Case and ambient may differ by this much before a run (a board fresh from the hand)."""
PLAUSIBLE_C = (-45.0, 90.0)
Read = Callable[[str], float]


def check_calibration(due: Mapping[str, dt.date], today: dt.date) -> None:
    """Every instrument's calibration is in date."""
    late = [f"{role} ({date})" for role, date in due.items() if date < today]
    if late:
        raise Refused(
            f"calibration is out of date: {', '.join(late)}; calibrate, or correct "
            "calibration_due in the bench file"
        )


def check_dead(read: Read) -> None:
    """Both ports are dead with everything off, by all three meter channels."""
    for point in ("exposed_voltage", "guarded_voltage", "drop"):
        value = read(point)
        if not abs(value) <= RESIDUAL_V:
            raise Refused(
                f"{point} is {value:.3g} V with everything off, above {RESIDUAL_V} V: something "
                "still feeds or charges it; disconnect and discharge it first"
            )


def check_sensors(read: Read) -> None:
    """Case and ambient are plausible, and near each other at rest."""
    temps = {point: read(point) for point in ("case", "ambient")}
    low, high = PLAUSIBLE_C
    for point, value in temps.items():
        if not low <= value <= high:
            raise Refused(
                f"{point} reads {value:.1f} C at rest, outside {low:g} to {high:g} C: check the "
                "sensor"
            )
    if not abs(temps["case"] - temps["ambient"]) <= REST_K:
        raise Refused(
            f"case reads {temps['case']:.1f} C and ambient {temps['ambient']:.1f} C at rest, more "
            f"than {REST_K:g} K apart: let the board settle, or check the sensors"
        )
