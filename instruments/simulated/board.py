"""A board in the fixture as it truly is: its parts drawn from tolerance, its faults built in."""

from __future__ import annotations

import random
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.elements import Resistor
from benchkit.circuit.network import Element
from benchkit.files import StageFile, load
from benchkit.stage import Sample, Stage, build_stage
from instruments.simulated.board_faults import (
    BOARD_FAULTS,
    NO_FUSE,
    OPEN_OHM,
    SHORT_OHM,
    check_faults,
    faulty_laws,
    faulty_parts,
    faulty_wiring,
    left,
    parse_faults,
)
from instruments.simulated.heat import BoardHeat
from instruments.simulated.wear import Wear, make_wear

__all__ = ["BOARD_FAULTS", "Board", "make_board", "parse_faults", "seed_of"]

Floats = NDArray[np.float64]


def seed_of(*parts: object) -> int:
    """A seed from anything printable, the same on every machine and in every process."""
    return zlib.crc32("\x1f".join(str(part) for part in parts).encode())


@dataclass
class Board:
    """One board's truth.

    stage: wired as this board is. without, beside: what its faults take away and bring in.
    """

    stage: Stage
    without: frozenset[str]
    beside: tuple[Element, ...]
    sample: Sample
    heat: BoardHeat
    wear: Wear
    ambient_C: float
    ambient_swing_K: float
    ambient_phase: float

    @property
    def main_nodes(self) -> tuple[str, ...]:
        """Of the main part, as it is fitted."""
        return self.stage.wiring.parts[self.stage.main]

    def elements(self, junction_C: Floats) -> list[Element]:
        """The stage with its faults and with what has worn; what belongs to a part is named as its
        own elements."""
        size, main = junction_C.size, self.stage.main
        boards = self.sample if size == 1 else self.sample.repeated(size)
        inside = self.stage.elements(boards, junction_C)
        opened = self.wear.opened
        if self.without or opened:
            inside = left(inside, (*self.without, *opened))
        inside += self.beside
        for reference in opened:
            first, last = self.stage.wiring.parts[reference]
            inside.append(Resistor(f"{reference}.open", (first, last), OPEN_OHM))
        if self.wear.part.dead:
            ends = self.main_nodes[0], self.main_nodes[-1]
            inside.append(Resistor(f"{main}.dead", ends, SHORT_OHM))
        return inside


def make_board(
    path: Path, serial: str, bench_seed: int, spelled: Sequence[str], ambient_C: float
) -> Board:
    """Draw a board from its stage's tolerances; the same serial is always the same board."""
    stage = build_stage(load(StageFile, path), str(path))
    faults = parse_faults(spelled)
    check_faults(stage, faults, str(path))
    seed = seed_of(bench_seed, serial, stage.file.stage.name)
    sample = stage.draw(1, seed)
    draw = random.Random(seed)
    laws = faulty_laws(stage, sample.laws, faults)
    rca = float(sample.case_to_ambient_K_per_W[0])
    rca = stage.file.heat.case_to_ambient_K_per_W * faults.get("heat-scale", 0) or rca
    slow = stage.file.heat.time_constant_s * draw.uniform(0.85, 1.15)
    heat = BoardHeat(
        rca,
        stage.junction_to_case_K_per_W * draw.uniform(0.8, 1.0),
        slow,
        slow * draw.uniform(0.1, 0.2),
    )
    fitted, behind = faulty_wiring(stage, faults)
    wear = make_wear(
        stage, laws, random.Random(seed_of(seed, "wear")),
        missing=any(fault in faults for fault in NO_FUSE), bridged="fuse-bridged" in faults,
    )  # fmt: skip
    return Board(
        fitted,
        *faulty_parts(fitted, faults, behind),
        Sample(1, laws, sample.case_to_ambient_K_per_W),
        heat,
        wear,
        ambient_C + draw.uniform(-1.0, 1.0),
        draw.uniform(0.05, 0.25),
        draw.uniform(0, 6.28),
    )
