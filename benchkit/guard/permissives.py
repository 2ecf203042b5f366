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
PROOF_SHARE = 0.2
"""How far the voltage that proves polarity may be off, as a share of it."""
MESH_V, MESH_SHARE = 0.03, 0.005
"""Exposed less guarded voltage must equal the drop within this and a share of the voltage."""

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
    """Both ports are dead with everything off."""
    for point in ("exposed_voltage", "guarded_voltage"):
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


def check_polarity(exposed_V: float, set_V: float, sign: int = 1) -> None:
    """What was set arrives at the exposed port, the way round that the harness says (``sign``)."""
    if abs(exposed_V - sign * set_V) <= PROOF_SHARE * set_V:
        return
    if -sign * exposed_V > RESIDUAL_V:
        hint = "the leads are crossed" if sign > 0 else "the leads are not crossed"
    else:
        hint = "the exposed port is shorted, loaded, or not connected"
    raise Refused(
        f"with {set_V:g} V set, exposed_voltage reads {exposed_V:.3g} V: {hint}; nothing "
        "larger is applied"
    )


def check_direction(exposed_A: float, limit_A: float, sign: int) -> None:
    """Where the stage conducts, so that the voltage proves nothing, the current does."""
    if not sign * exposed_A >= 0.5 * limit_A:
        raise Refused(
            f"the supply limits its current at {limit_A:g} A, but exposed_current reads "
            f"{exposed_A:.3g} A: neither voltage nor current proves which way round the leads are"
        )


def check_mesh(exposed_V: float, guarded_V: float, drop_V: float) -> None:
    """Kirchhoff's voltage law holds around the three meter channels."""
    left = exposed_V - guarded_V - drop_V
    if not abs(left) <= MESH_V + MESH_SHARE * abs(exposed_V):
        raise Refused(
            f"exposed {exposed_V:.4g} V less guarded {guarded_V:.4g} V less drop {drop_V:.4g} V "
            f"leaves {left:.3g} V, which must be near zero: a measuring lead is off or crossed"
        )
