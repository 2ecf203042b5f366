"""A world without physics for the tests of the simulated instruments, and a bench file for it.

``python -m tests.instruments.simulated_fake BENCH --virtual`` serves it as the real one is.
"""

from __future__ import annotations

import math
import sys
from dataclasses import dataclass, field
from pathlib import Path

from benchkit.files.bench import BenchFile
from benchkit.files.loading import parse
from benchkit.harness import DRAWING, Harness, Source
from instruments.simulated.core import Core
from instruments.simulated.server import build_devices
from instruments.simulated.timebase import Timebase, VirtualTime

BENCH = """
[bench]
name = "Test bench"
voltage_max_V = 30.0
current_max_A = 5.0
power_max_W = 100.0

[instruments.supply]
kind = "supply"
resource = "simulated"
dialect = "supply-plain"
identity = "Northlight,NL-36"
channel = "1"
calibration_due = 2031-01-31

[instruments.load]
kind = "load"
resource = "simulated"
dialect = "load-plain"
identity = "Northlight,EL-5"
calibration_due = 2031-01-31

[instruments.meter]
kind = "meter"
resource = "simulated"
dialect = "meter-scan"
identity = "Weir,S20"
calibration_due = 2031-01-31
voltage = [
    { range_V = 0.1, reading_percent = 0.005, range_percent = 0.004 },
    { range_V = 1, reading_percent = 0.004, range_percent = 0.0007 },
    { range_V = 10, reading_percent = 0.0035, range_percent = 0.0005 },
    { range_V = 100, reading_percent = 0.0045, range_percent = 0.0006 },
]

[instruments.thermometer]
kind = "thermometer"
resource = "simulated"
dialect = "thermometer-scan"
identity = "Weir,T8"
calibration_due = 2031-01-31
temperature = { offset_K = 0.5 }

[points]
drop = { instrument = "meter", route = "101" }
exposed_voltage = { instrument = "meter", route = "102" }
guarded_voltage = { instrument = "meter", route = "103" }
exposed_current = { instrument = "meter", route = "104", shunt_ohm = 0.01 }
case = { instrument = "thermometer", route = "101" }
ambient = { instrument = "thermometer", route = "102" }

[simulated]
seed = 7
serial = "T-1"
"""

BATTERY = """
[instruments.battery]
kind = "supply"
resource = "simulated"
dialect = "supply-plain"
identity = "Northlight,NL-36"
calibration_due = 2031-01-31
stands_for = "battery"
bleeder_ohm = 100.0
"""

SWITCH = """
[instruments.switch]
kind = "switch"
resource = "simulated"
dialect = "switch-plain"
identity = "Weir,R8"
calibration_due = 2031-01-31

[wiring]
instrument = "switch"
loop = "loop"
straight = "301"
crossed = "302"
bleeder = "303"
"""
WITH_BATTERY = ("[simulated]", BATTERY + "[simulated]")
WITH_SWITCH = ("[simulated]", SWITCH + "[simulated]")
WITH_BLEEDER = ("power_max_W = 100.0", "power_max_W = 100.0\nbleeder_ohm = 1000.0")
"""Swaps for ``bench_file``: a battery's stand-in; relays and the loop, which need the bleeder."""


def bench_file(*swaps: tuple[str, str]) -> BenchFile:
    """The bench above, after replacing one text by another, pair by pair."""
    text = BENCH
    for old, new in swaps:
        assert old in text
        text = text.replace(old, new)
    return parse(BenchFile, text, "bench.toml")


@dataclass
class FakeWorld:
    """Whatever the test writes into it; remembers what it was told."""

    timebase: Timebase = field(default_factory=VirtualTime)
    volts: dict[str, float] = field(default_factory=dict)
    temperatures: dict[str, float | None] = field(
        default_factory=lambda: {"case": 40.0, "ambient": 25.0}
    )
    supply: tuple[float, float, bool] = (0.0, 0.0, False)
    battery: tuple[float, float, bool] = (0.0, 0.0, False)
    load: tuple[str, float, bool] = ("CURR", 0.0, False)
    current: float = 0.0
    limits: bool = False
    faults: dict[str, tuple[float, float]] = field(default_factory=dict)
    inserted: list[tuple[str, str]] = field(default_factory=list)
    harness: Harness = DRAWING
    relays: dict[str, bool] = field(default_factory=dict)
    lines: dict[str, bool] = field(default_factory=dict)

    def now(self) -> float:
        return self.timebase.now()

    def elapse(self, seconds: float) -> None:
        self.timebase.elapse(seconds)

    def command_supply(self, source: Source, voltage_V: float, current_A: float, on: bool) -> None:
        setattr(self, source, (voltage_V, current_A, on))

    def supply_terminals(self, source: Source) -> tuple[float, float, bool]:
        voltage, _, on = self.supply if source == "supply" else self.battery
        return (voltage, self.current, self.limits) if on else (0.0, 0.0, False)

    def command_load(self, mode: str, value: float, on: bool) -> None:
        self.load = (mode, value, on)

    def load_terminals(self) -> tuple[float, float]:
        return self.supply_terminals("supply")[0], self.current

    def voltage(self, probe: str) -> float:
        return self.volts.get(probe, 0.0)

    def temperature(self, probe: str) -> float | None:
        return self.temperatures[probe]

    def wire(self, harness: Harness) -> None:
        if "load" in harness.exposed and "load" in harness.guarded:
            raise ValueError("the load cannot be at both ports")
        self.harness = harness

    def relay(self, route: str, closed: bool) -> None:
        self.relays[route] = closed

    def line(self, name: str) -> bool:
        return self.lines.get(name, False)

    def insert(self, serial: str, stage_path: str) -> None:
        if not stage_path.endswith(".toml"):
            raise ValueError(f'{stage_path}: there is no such file, give a "stage" file')
        self.inserted.append((serial, stage_path))

    def refit(self, reference: str) -> None:
        if not reference.startswith("F"):
            raise ValueError(f"{reference} is no fuse of this board that could be replaced")
        self.inserted.append((reference, "new"))

    def fault(self, name: str, at_s: float, value: float) -> None:
        if ":" not in name:
            raise ValueError(f"there is no fault named {name!r}")
        self.faults[name] = (at_s, value)

    def clear_faults(self) -> None:
        self.faults.clear()

    def active(self, name: str) -> float | None:
        at_s, value = self.faults.get(name, (0.0, None))
        return value if value is not None and self.now() >= at_s else None

    def truth(self, name: str) -> float:
        return {"drop": 0.345, "never": math.nan}[name]


class Bench:
    """All devices over one fake world, spoken to without sockets."""

    def __init__(self, file: BenchFile | None = None) -> None:
        self.file = file or bench_file()
        self.world = FakeWorld()
        assert self.file.simulated is not None
        core = Core(self.world, self.file.simulated.seed, self.file.simulated.serial)
        self.devices = build_devices(self.file, core)

    def ask(self, name: str, message: str) -> str:
        """Send a message that must be answered."""
        answer = self.devices[name].execute(message)
        assert answer is not None, f"{message} was not answered"
        return answer

    def tell(self, name: str, message: str) -> None:
        """Send a message that must be understood and not be answered."""
        assert self.devices[name].execute(message) is None
        assert self.error(name) == 0, message

    def error(self, name: str) -> int:
        """The number of the oldest error in a device's queue."""
        return int(self.devices[name].errors.pop().split(",")[0])


def build(bench: BenchFile, bench_path: Path, timebase: Timebase) -> FakeWorld:
    """What ``build_plant`` is to the real bench."""
    assert bench.simulated is not None
    assert bench_path.name
    return FakeWorld(timebase)


if __name__ == "__main__":
    from instruments.simulated.__main__ import main

    sys.exit(main(build=build))
