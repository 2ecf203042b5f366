"""What sources and load were told, and what they hold by now."""

from __future__ import annotations

import math

from benchkit.files import BenchFile
from benchkit.harness import Source
from instruments.simulated.armed import BATTERY_BLEEDER_MISSING, ArmedFaults
from instruments.simulated.hookup import Feed
from instruments.simulated.output import RegulatedOutput

LOAD_LAG_S = 0.003
LEAD_OHM = 0.018
LAG_SHARE = 0.25


class Drives:
    """The supply, the battery's stand-in where the bench has one, and the load."""

    def __init__(self, bench: BenchFile) -> None:
        self.outputs: dict[Source, RegulatedOutput] = {"supply": RegulatedOutput()}
        self._bleeder_ohm = None
        if bench.battery is not None:
            self.outputs["battery"] = RegulatedOutput()
            self._bleeder_ohm = bench.battery[1].bleeder_ohm
        self.load = ("CURR", 0.0, False)
        self.amps = 0.0

    def restart(self) -> None:
        """Nothing left of what was before: a board was put in."""
        self.amps = 0.0
        for output in self.outputs.values():
            output.restart()

    @property
    def target_A(self) -> float:
        """Where the load's current is going."""
        mode, value, drawing = self.load
        return value if drawing and mode == "CURR" else 0.0

    def pass_time(self, seconds: float) -> None:
        """Outputs come up and run down, the load's current goes where it was told to."""
        for output in self.outputs.values():
            output.pass_time(seconds)
        self.amps = _towards(self.amps, self.target_A, seconds / LOAD_LAG_S)

    def steady_s(self) -> float:
        """How long nothing here changes; on the way of a load's current, a part of its lag."""
        if self.amps != self.target_A:
            return LAG_SHARE * LOAD_LAG_S
        return min(output.steady_s() for output in self.outputs.values())

    def feeds(self, faults: ArmedFaults, age_s: float) -> dict[Source, Feed]:
        """What every source holds, and what is in its lead and across its terminals."""
        bleeder = self._bleeder_ohm
        if faults.active(BATTERY_BLEEDER_MISSING, age_s) is not None:
            bleeder = None
        return {
            source: Feed(
                output.emf_V, output.limit_A, output.on,
                LEAD_OHM + faults.in_lead_ohm(source, age_s),
                bleeder if source == "battery" else None,
            )
            for source, output in self.outputs.items()
        }  # fmt: skip


def _towards(value: float, target: float, time_constants: float) -> float:
    """First-order approach, exact once it is within a part in a billion."""
    moved = target + (value - target) * math.exp(-time_constants)
    return target if abs(moved - target) <= 1e-9 * max(abs(target), 1.0) else moved
