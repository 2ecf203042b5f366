"""One reading, as it is written to the record and used by every calculation."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

Status = Literal["ok", "overload", "invalid"]

POINT_UNITS = {
    "drop": "V",
    "exposed_voltage": "V",
    "guarded_voltage": "V",
    "exposed_current": "A",
    "case": "C",
    "ambient": "C",
    "gate_voltage": "V",
    "supply_voltage": "V",
    "supply_current": "A",
    "battery_voltage": "V",
    "battery_current": "A",
}
"""The quantities a bench can read, with their units. The first six, and the
gate's voltage where its taps are, are read by the bench's instruments as its file says
(``supply_*`` and ``battery_*`` are the supplies' own read-backs)."""


@dataclass(frozen=True, slots=True)
class Reading:
    """A value of one point at one time.

    time_s is bench time since the start of the run; u is the standard uncertainty (same unit as
    value) from the declared accuracy of the instrument; range is the instrument's full scale in
    the unit of what the instrument itself measures (volts across a shunt, for a current).
    """

    time_s: float
    point: str
    value: float
    unit: str
    u: float
    range: float
    status: Status = "ok"

    @property
    def usable(self) -> bool:
        """True when the instrument gave a finite number within its range."""
        return self.status == "ok" and math.isfinite(self.value)
