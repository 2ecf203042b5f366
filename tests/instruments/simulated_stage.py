"""A plant with one of the nine stages in its fixture, and its supply switched on."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path

from benchkit.harness import REVERSED
from instruments.simulated.plant import Plant
from instruments.simulated.timebase import VirtualTime
from tests.benchkit.nine_stages import text
from tests.instruments.simulated_fake import bench_file

Make = Callable[..., Plant]
VOLTS, LIMIT = 12.0, 1.0
EMPTY: Mapping[str, str | None] = {}


def plant_with(
    folder: Path,
    topology: str,
    *faults: str,
    wiring: tuple[str, ...] = (),
    bench_has: tuple[tuple[str, str], ...] = (),
    parts: Mapping[str, str | None] = EMPTY,
) -> Plant:
    """One name for every stage, so that a mirror is made of the same parts.

    wiring: faults of the bench. bench_has: swaps for ``bench_file``. parts: as of ``text``.
    """
    path = folder / f"{topology}.toml"
    told = text(topology, "", "", **parts).replace(f"Buoy charger, {topology}", "Buoy")
    path.write_text(told, "utf-8")
    bench = bench_file(*bench_has)
    assert bench.simulated is not None
    bench.simulated.boards["S-1"] = list(faults)
    bench.simulated.faults.extend(wiring)
    plant = Plant(bench, folder / "bench.toml", VirtualTime())
    plant.insert("S-1", str(path))
    return plant


def energise(plant: Plant, volts: float = VOLTS, limit: float = LIMIT, load: float = 0.0) -> None:
    plant.command_supply("supply", volts, limit, True)
    plant.command_load("CURR", load, load > 0)
    plant.elapse(0.5)


def crossed(plant: Plant, volts: float = VOLTS, limit: float = LIMIT, load: float = 0.0) -> Plant:
    plant.wire(REVERSED)
    energise(plant, volts, limit, load)
    return plant


def kick(plant: Plant, volts: float = 6.0, limit: float = 0.5) -> None:
    """Switch the battery's stand-in on for a moment, and off again."""
    plant.command_supply("battery", volts, limit, True)
    plant.elapse(0.5)
    plant.command_supply("battery", volts, limit, False)
    plant.elapse(1)
