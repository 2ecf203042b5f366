"""What can be wrong with the bench around a board, and which of it is wrong now."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

from benchkit.harness import Harness, Source
from instruments.simulated import INSTRUMENT_FAULTS

CROSSING_STUCK, LEAD_RESISTANCE = "crossing-stuck", "lead-resistance"
CONDUCTS_BACK = "load-conducts-back"
LOOP_OPEN = "loop-open"
BLEEDER_MISSING, BATTERY_BLEEDER_MISSING = "bleeder-missing", "battery-bleeder-missing"
BATTERY_LEAD_RESISTANCE, BATTERY_LEAD_OFF = "battery-lead-resistance", "battery-lead-off"

WIRING_FAULTS = {
    "lead-off:drop": "a Kelvin lead of this point is off: the meter floats",
    "lead-off:exposed_voltage": "a lead of this point is off: the meter floats",
    "lead-off:guarded_voltage": "a lead of this point is off: the meter floats",
    "lead-off:gate_voltage": "a lead of this point is off: the meter floats",
    "sensor-open:case": "the case sensor is open",
    "sensor-open:ambient": "the ambient sensor is open",
    LEAD_RESISTANCE: "this many ohms more in the lead from the supply",
    CROSSING_STUCK: "nothing is wired otherwise: a relay is stuck, or a person did not do it",
    BLEEDER_MISSING: "no resistor is across the guarded port, whatever was wired",
    BATTERY_LEAD_RESISTANCE: "this many ohms more in the lead from the battery's stand-in",
    BATTERY_LEAD_OFF: "the battery's stand-in is connected to nothing",
    BATTERY_BLEEDER_MISSING: "no resistor is across the terminals of the battery's stand-in",
    LOOP_OPEN: "the interlock loop is open: its digital input reads low",
    CONDUCTS_BACK: "a reversed voltage drives current through the load, as through the body "
    "diodes of its transistors",
}
"""What can be wrong with the wiring, by name."""
RESISTANCES: dict[str, Source] = {LEAD_RESISTANCE: "supply", BATTERY_LEAD_RESISTANCE: "battery"}


class ArmedFaults:
    """Faults of wiring, instrument and link, each with the board time from which it is on."""

    def __init__(self) -> None:
        self._armed: list[tuple[str, float, float]] = []

    def arm(self, name: str, at_s: float, value: float) -> None:
        """Add one; ValueError when there is no fault of that name."""
        kinds = {known.partition(":")[0] for known in INSTRUMENT_FAULTS}
        if name not in WIRING_FAULTS and name.partition(":")[0] not in kinds:
            raise ValueError(
                f"{name!r} is not a fault of the bench; they are "
                f"{', '.join([*WIRING_FAULTS, *INSTRUMENT_FAULTS])}"
            )
        self._armed.append((name, at_s, value))

    def arm_spelled(self, spelled: Sequence[str]) -> None:
        """Only these, spelled as in a bench file: name@seconds or name=value@seconds."""
        self.clear()
        for text in spelled:
            what, _, at = text.partition("@")
            name, _, value = what.partition("=")
            self.arm(name, float(at or 0), float(value or 1))

    def clear(self) -> None:
        """Take every one away."""
        self._armed = []

    def active(self, name: str, age_s: float) -> float | None:
        """The value of a fault whose time has come, or None."""
        if not self._armed:
            return None
        values = [value for known, at_s, value in self._armed if known == name and at_s <= age_s]
        return values[-1] if values else None

    def connected(self, harness: Harness, age_s: float) -> Harness:
        """What is left of what was wired."""
        if not self._armed:
            return harness
        if self.active(BLEEDER_MISSING, age_s) is not None:
            harness = dataclasses.replace(harness, bleeder_ohm=None)
        if self.active(BATTERY_LEAD_OFF, age_s) is not None:
            exposed = tuple(name for name in harness.exposed if name != "battery")
            harness = dataclasses.replace(harness, exposed=exposed)
        return harness

    def in_lead_ohm(self, source: Source, age_s: float) -> float:
        """What is in a source's lead beside its own resistance."""
        if not self._armed:
            return 0.0
        return sum(
            self.active(name, age_s) or 0.0 for name, of in RESISTANCES.items() if of == source
        )
