"""A board in the fixture as it truly is: its parts drawn from tolerance, its faults built in."""

from __future__ import annotations

import dataclasses
import random
import zlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from benchkit.circuit.elements import Resistor
from benchkit.circuit.network import Element
from benchkit.files import StageFile, load
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.mosfet import MosfetLaws
from benchkit.placing import Law
from benchkit.stage import Sample, Stage, build_stage
from benchkit.topologies.base import EXPOSED, GUARDED
from instruments.simulated.heat import BoardHeat

BOARD_FAULTS = {
    "gate-open": "the gate is not driven: the channel stays off and the body diode carries all",
    "rds-on-scale": "the channel's on-resistance is this many times the typical one",
    "drop-shift": "the junction drops this many volts more than it should at every current",
    "dry-joint": "this many ohms stand in the current's way inside the stage",
    "short": "the part is shorted through a few milliohms",
    "open": "the part is open",
    "heat-scale": "case-to-ambient thermal resistance is this many times the typical one",
}
"""What can be wrong with a board itself, by name."""


def seed_of(*parts: object) -> int:
    """A seed from anything printable, the same on every machine and in every process."""
    return zlib.crc32("\x1f".join(str(part) for part in parts).encode())


def parse_faults(spelled: Sequence[str]) -> dict[str, float]:
    """Turn ["dry-joint=0.02", "gate-open"] into values by name; ValueError for an unknown one."""
    faults = {}
    for text in spelled:
        name, _, value = text.partition("=")
        if name not in BOARD_FAULTS:
            raise ValueError(
                f"{name!r} is not a fault of a board; they are {', '.join(BOARD_FAULTS)}"
            )
        try:
            faults[name] = float(value) if value else 1.0
        except ValueError:
            raise ValueError(f"{text!r}: {value!r} is not a number") from None
    return faults


@dataclass
class Board:
    """One board's truth."""

    stage: Stage
    sample: Sample
    faults: Mapping[str, float]
    heat: BoardHeat
    ambient_C: float
    ambient_swing_K: float
    ambient_phase: float

    def elements(self, junction_C: np.ndarray[tuple[int], np.dtype[np.float64]]) -> list[Element]:
        """The stage with its faults, between ``exposed+`` and ``guarded+``."""
        size = junction_C.size
        boards = self.sample if size == 1 else self.sample.repeated(size)
        inside = self.stage.elements(boards, junction_C)
        if "open" in self.faults:
            return [Resistor("fault", (EXPOSED, GUARDED), 1e8)]
        if "short" in self.faults:
            inside.append(Resistor("fault", (EXPOSED, GUARDED), 4e-3))
        return inside


def make_board(
    path: Path, serial: str, bench_seed: int, spelled: Sequence[str], ambient_C: float
) -> Board:
    """Draw a board from its stage's tolerances; the same serial is always the same board."""
    stage = build_stage(load(StageFile, path), str(path))
    faults = parse_faults(spelled)
    seed = seed_of(bench_seed, serial, stage.file.stage.name)
    sample = stage.draw(1, seed)
    draw = random.Random(seed)
    laws = dict(sample.laws)
    laws[stage.main] = _faulty(stage, laws[stage.main], faults)
    rca = float(sample.case_to_ambient_K_per_W[0])
    rca = stage.file.heat.case_to_ambient_K_per_W * faults.get("heat-scale", 0) or rca
    slow = stage.file.heat.time_constant_s * draw.uniform(0.85, 1.15)
    heat = BoardHeat(
        rca,
        stage.junction_to_case_K_per_W * draw.uniform(0.8, 1.0),
        slow,
        slow * draw.uniform(0.1, 0.2),
    )
    return Board(
        stage,
        Sample(1, laws, sample.case_to_ambient_K_per_W),
        faults,
        heat,
        ambient_C + draw.uniform(-1.0, 1.0),
        draw.uniform(0.05, 0.25),
        draw.uniform(0, 6.28),
    )


def _faulty(stage: Stage, law: Law, faults: Mapping[str, float]) -> Law:
    if isinstance(law, MosfetLaws):
        channel = law.channel
        if "rds-on-scale" in faults:
            typical = stage.typical().laws[stage.main]
            assert isinstance(typical, MosfetLaws)
            channel = dataclasses.replace(
                channel,
                gain_A_per_V2=typical.channel.gain_A_per_V2 / faults["rds-on-scale"],
                threshold_V=typical.channel.threshold_V,
                series_ohm=typical.channel.series_ohm * faults["rds-on-scale"],
            )
        if "gate-open" in faults:
            channel = dataclasses.replace(channel, gain_A_per_V2=channel.gain_A_per_V2 * 1e-12)
        return MosfetLaws(channel, law.body)
    if isinstance(law, DiodeLaw) and "drop-shift" in faults:
        scale = float(law.ideality) * 0.02569
        law = dataclasses.replace(
            law, saturation_A=law.saturation_A * np.exp(-faults["drop-shift"] / scale)
        )
    return law
