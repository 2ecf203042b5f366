"""A plant with one of the nine stages in its fixture, and its supply switched on."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from benchkit.harness import REVERSED
from instruments.simulated.plant import Plant
from instruments.simulated.timebase import VirtualTime
from tests.benchkit.nine_stages import text
from tests.instruments.simulated_fake import bench_file

Make = Callable[..., Plant]
VOLTS, LIMIT = 12.0, 1.0


def plant_with(folder: Path, topology: str, *faults: str, wiring: tuple[str, ...] = ()) -> Plant:
    """One name for every stage, so that a mirror is made of the same parts."""
    path = folder / f"{topology}.toml"
    path.write_text(text(topology).replace(f"Buoy charger, {topology}", "Buoy"), "utf-8")
    bench = bench_file()
    assert bench.simulated is not None
    bench.simulated.boards["S-1"] = list(faults)
    bench.simulated.faults.extend(wiring)
    plant = Plant(bench, folder / "bench.toml", VirtualTime())
    plant.insert("S-1", str(path))
    return plant


def energise(plant: Plant, volts: float = VOLTS, limit: float = LIMIT, load: float = 0.0) -> None:
    plant.command_supply(volts, limit, True)
    plant.command_load("CURR", load, load > 0)
    plant.elapse(0.5)


def crossed(plant: Plant, volts: float = VOLTS, limit: float = LIMIT, load: float = 0.0) -> Plant:
    plant.wire(REVERSED)
    energise(plant, volts, limit, load)
    return plant
