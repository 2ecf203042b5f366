"""Benches and stages of the fault campaign, and a simulated bench that outlives its opening."""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from functools import lru_cache
from importlib.resources import files
from pathlib import Path
from unittest.mock import patch

import numpy as np
from numpy.typing import NDArray

import instruments.bench
from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.stage import Stage, build_stage
from instruments.bench import CONTROL_IDENTITY, CONTROL_TIMING
from instruments.link import Link
from instruments.session import Session
from instruments.simulated.child import ChildBench, start_child
from procedures.inputs import BoardInputs, read_board
from tests.benchkit.nine_stages import PARTS, text
from tests.campaigns.faults_world import COLUMNS, WITNESSED
from tests.simulated_bench import QUICK

WORLD = "tests.campaigns.faults_world"
COMMAND_S = max(QUICK["set_s"], QUICK["read_s"])
"""The longest that one command may take, with the dialects of these benches."""
REVERSE = "[reverse]\nsteps = 2\ndwell_s = 1.0\n"
CLAMPED = "[reverse]\ncurrent_limit_A = 0.01\n"
SUPPLIES = "[supply_sweep]\nvoltages_V = [1.5, 3.0, 5.0, 8.0, 12.0]\n"
BATTERY = "[battery_trial]\ndwell_s = 0.5\n"
SOAK = "[soak]\ncurrent_A = 2.0\nlongest_s = 60.0\nknown_within_K = 20.0\n"


def _limits(drop_V: float, *more: str) -> str:
    """On the drop at 2 A, and whatever else."""
    return "\n".join([f"[limits]\ndrop = [{{ current_A = 2.0, max_V = {drop_V} }}]", *more, ""])


STAGES: dict[str, tuple[str, str]] = {
    "series-diode": (
        "series-diode",
        REVERSE + _limits(0.52, "leakage_max_A = 2e-3", "guarded_reverse_max_V = 0.5"),
    ),
    "series-diode-soaked": ("series-diode", SOAK + _limits(0.52, "case_max_C = 120.0")),
    "series-diode-battery": (
        "series-diode", BATTERY + _limits(0.52, "battery_current_max_A = 0.03")
    ),
    "pmos-pass": (
        "pmos-pass",
        REVERSE + SUPPLIES
        + _limits(0.075, "guarded_reverse_max_V = 0.3", "on_from_max_V = 8.0",
                  "gate_margin_min_V = 2.0"),
    ),
    "pmos-pass-zener": (
        "pmos-pass-zener", REVERSE + _limits(0.075, "guarded_reverse_max_V = 0.3")
    ),
    "pmos-sensed": (
        "pmos-sensed", BATTERY + _limits(0.075, "battery_current_max_A = 0.03")
    ),
    "nmos-pass": (
        "nmos-pass", SOAK + REVERSE + _limits(0.075, "guarded_reverse_max_V = 0.3")
    ),
    "nmos-pass-zener": ("nmos-pass-zener", SUPPLIES + _limits(0.075, "gate_margin_min_V = 2.0")),
    "nmos-sensed": ("nmos-sensed", REVERSE + BATTERY + _limits(0.075)),
    "clamp": ("clamp", CLAMPED + _limits(0.01, "leakage_max_A = 1e-3")),
    "fused-clamp": (
        "fused-clamp",
        CLAMPED + "[fused_trial]\ncurrent_A = 9.0\n"
        + _limits(0.1, "leakage_max_A = 1e-3", "fuse_clears_max_s = 8.0"),
    ),
    "fused-clamp-battery": ("fused-clamp", BATTERY + _limits(0.1)),
}  # fmt: skip
"""Topology, and the tables of its trials and limits."""
QUICK_STAGES = {
    "series-diode-quick": (
        "series-diode",
        "[reverse]\nsteps = 1\ndwell_s = 0.5\n"
        + _limits(0.52, "leakage_max_A = 2e-3", "guarded_reverse_max_V = 0.5"),
    ),
}
"""For tests."""
EVERY_STAGE = STAGES | QUICK_STAGES
QUICK_FUSE = f"{PARTS['fuse']}points = [{{ current_A = 8.0, time_s = 1.5 }}]\n"
"""Coordinated with the clamp, at the current of the fused trial."""
FEW_CURRENTS = "currents_A = [0.1, 0.5, 2.0, 3.0]"
DIALECTS = ("load-plain", "meter-scan", "thermometer-scan", "switch-plain")
SUPPLY_DIALECTS = ("supply-list", "supply-select", "supply-plain")
SWITCH = """
[instruments.switch]
kind = "switch"
resource = "simulated"
dialect = "switch-plain"
identity = "Murrelet,SW-8"
calibration_due = 2031-05-31

[wiring]
instrument = "switch"
loop = "loop"
straight = "301"
crossed = "302"
bleeder = "303"

"""


@dataclass(frozen=True)
class Fitting:
    """One way in which a bench is made. relays: it has a switch unit with loop and relays."""

    supply: str
    relays: bool

    @property
    def instruments(self) -> tuple[str, ...]:
        """Those that a fault may strike."""
        own = ("supply", "battery", "load", "meter", "thermometer")
        return (*own, "switch") if self.relays else own


FITTINGS = tuple(Fitting(s, relays) for s in SUPPLY_DIALECTS for relays in (True, False))


class Shop:
    """A folder with a bench and all stages; boards: what is wrong with each serial."""

    def __init__(self, folder: Path, fitting: Fitting, boards: dict[str, list[str]]) -> None:
        folder.mkdir(parents=True)
        self.folder, self.fitting = folder, fitting
        self.bench = folder / "bench.toml"
        self.bench.write_text(_bench(folder, fitting, boards), "utf-8")
        for name in EVERY_STAGE:
            (folder / f"{name}.toml").write_text(stage_text(name), "utf-8")

    def inputs(self, stage: str) -> BoardInputs:
        """Of one stage, planned; a plan serves every bench of the same fitting."""
        path, key = self.folder / f"{stage}.toml", (self.fitting, stage)
        if key not in _PLANNED:
            _PLANNED[key] = read_board(path, self.bench)
        known = _PLANNED[key]
        job = replace(
            known.job, stage_path=path, inputs={"bench.toml": self.bench, "stage.toml": path}
        )
        return replace(known, bench_path=self.bench, job=job)


_PLANNED: dict[tuple[Fitting, str], BoardInputs] = {}


def stage_text(name: str) -> str:
    """A stage file."""
    topology, tables = EVERY_STAGE[name]
    parts = {"F1": QUICK_FUSE} if topology == "fused-clamp" else {}
    # Without a fuse nothing ends a reversed battery's current, and nothing here is to stand it.
    stands = 'must_stand = ["right-way", "open"]' if topology == "clamp" else ""
    told = text(topology, stage=stands, tables=tables, **parts)
    told = re.sub(r"currents_A = \[.*\]", FEW_CURRENTS, told)
    if "[soak]" in tables:
        told = told.replace("time_constant_s = 40", "time_constant_s = 12")
    return told.replace(f"Buoy charger, {topology}", f"Buoy charger, {name}")


@lru_cache(maxsize=32)
def stage_of(name: str) -> Stage:
    """A stage as the calculations see it."""
    return build_stage(parse(StageFile, stage_text(name), name), name)


def _bench(folder: Path, fitting: Fitting, boards: dict[str, list[str]]) -> str:
    starter = files("benchkit.files.starters").joinpath("bench.toml").read_text("utf-8")
    told, _, _ = starter.partition("[simulated.boards]")
    told = re.sub(r"(?m)^(stage|serial) = .*\n", "", told)
    told = re.sub(r"calibration_due = .*", "calibration_due = 2031-05-31", told)
    told = told.replace('dialect = "supply-list"', f'dialect = "{fitting.supply}"')
    if fitting.supply == "supply-plain":
        told = told.replace('channel = "1"\n', "")
    if fitting.relays:
        told = told.replace("\n[simulated]\n", f"{SWITCH}[simulated]\n")
    for name in (*SUPPLY_DIALECTS, *DIALECTS):
        shipped = files("instruments.dialects").joinpath(f"{name}.toml").read_text("utf-8")
        for key, value in QUICK.items():
            shipped, count = re.subn(rf"(?m)^{key} = [\d.]+", f"{key} = {value}", shipped)
            assert count == 1, (name, key)
        (folder / f"{name}-quick.toml").write_text(shipped, "utf-8")
        told = told.replace(f'"{name}"', f'"{name}-quick.toml"')
    faulty = [
        f"{serial} = [{', '.join(repr(fault) for fault in faults)}]"
        for serial, faults in boards.items() if faults
    ]  # fmt: skip
    return "\n".join([told, "[simulated.boards]", *faulty, ""])


class World:
    """The simulated bench of a shop, and a line of its own to its control port."""

    def __init__(self, shop: Shop, child: ChildBench, control: Session) -> None:
        self._shop, self._control = shop, control
        self.child = child

    def clear(self) -> None:
        """No fault, nothing on, and time for everything to run down."""
        self._control.set(":SIM:FAUL:CLE", "slow")
        self._control.set(":SIM:TIME:ADV 2", "slow")

    def arm(self, fault: str, at_s: float, value: float) -> None:
        """A fault of bench, instrument or link, from this age of the board on."""
        self._control.set(f':SIM:FAUL "{fault}",{at_s:.6f},{value:.6g}', "slow")

    def advance(self, seconds: float) -> None:
        """Let bench time pass."""
        self._control.set(f":SIM:TIME:ADV {seconds:g}", "slow")

    def truth(self, name: str) -> float:
        """See ``Plant.truth`` and ``faults_world``."""
        return self._control.ask_number(f':SIM:TRUT? "{name}"')

    def witnessed(self) -> dict[str, NDArray[np.float64]]:
        """What was truly so since the board was put in, by column."""
        self.truth("witnessed")
        rows = np.load(self._shop.folder / WITNESSED)
        return dict(zip(COLUMNS, rows.T, strict=True))


@contextmanager
def served(shop: Shop) -> Iterator[World]:
    """The simulated bench of a shop. Whoever opens the shop's bench meanwhile gets this one."""
    with start_child(shop.bench, module=WORLD) as child:
        resource = f"TCPIP::127.0.0.1::{child.ports['control']}::SOCKET"
        control = Session(Link("witness", resource, terminator="\n"), CONTROL_TIMING,
                          CONTROL_IDENTITY)  # fmt: skip
        control.open()
        try:
            with patch.object(instruments.bench, "start_child", lambda _: _Lent(child)):
                yield World(shop, child, control)
        finally:
            control.close()


class _Lent:
    """A child that is not ended by who opened it."""

    def __init__(self, child: ChildBench) -> None:
        self.ports = child.ports

    def __enter__(self) -> _Lent:
        return self

    def __exit__(self, *_: object) -> None:
        return None
