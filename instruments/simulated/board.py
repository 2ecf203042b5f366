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
from benchkit.circuit.network import GROUND, Element
from benchkit.files import StageFile, load
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.mosfet import MosfetLaws
from benchkit.placing import Law
from benchkit.prediction.part_state import own_elements
from benchkit.stage import Sample, Stage, build_stage
from benchkit.topologies.base import Ports, Wiring
from instruments.simulated.heat import BoardHeat

SHORT_OHM, OPEN_OHM = 4e-3, 1e8
PIN, PIN_OHM = "pin", 1e6
"""Node of a gate that nothing drives, and what holds it at the source."""
JOINT = "joint"
"""The exposed terminal of the broken lead, where a dry joint is between it and the rest."""

BOARD_FAULTS = {
    "gate-open": "the gate is not driven: the channel stays off and the body diode carries all",
    "rds-on-scale": "the channel's on-resistance is this many times the typical one",
    "drop-shift": "the junction drops this many volts more than it should at every current",
    "dry-joint": "this many ohms stand in the current's way inside the stage",
    "short": "the part is shorted through a few milliohms",
    "open": "the part is open",
    "leaky": "this many ohms lie across the part: it leaks backwards",
    "wrong-way-round": "the part is fitted the other way: its first and last terminals are swapped",
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
    """One board's truth.

    stage: wired as this board is. behind_joint: the node that a dry joint leads to.
    """

    stage: Stage
    behind_joint: str
    sample: Sample
    faults: Mapping[str, float]
    heat: BoardHeat
    ambient_C: float
    ambient_swing_K: float
    ambient_phase: float

    @property
    def main_nodes(self) -> tuple[str, ...]:
        """Of the main part, as it is fitted."""
        return self.stage.wiring.parts[self.stage.main]

    def elements(self, junction_C: np.ndarray[tuple[int], np.dtype[np.float64]]) -> list[Element]:
        """The stage with its faults; those of the main part are named as its own elements."""
        size, main = junction_C.size, self.stage.main
        boards = self.sample if size == 1 else self.sample.repeated(size)
        inside = self.stage.elements(boards, junction_C)
        ends = self.main_nodes[0], self.main_nodes[-1]
        if "open" in self.faults:
            own = {element.name for element in own_elements(inside, main)}
            inside = [element for element in inside if element.name not in own]
            inside.append(Resistor(f"{main}.open", ends, OPEN_OHM))
        elif "gate-open" in self.faults and self.stage.gate_nodes is not None:
            inside.append(Resistor(f"{main}.pin", self.stage.gate_nodes, PIN_OHM))
        if "short" in self.faults:
            inside.append(Resistor(f"{main}.short", ends, SHORT_OHM))
        if "leaky" in self.faults:
            inside.append(Resistor(f"{main}.leak", ends, self.faults["leaky"]))
        if "dry-joint" in self.faults:
            inside.append(Resistor(JOINT, (JOINT, self.behind_joint), self.faults["dry-joint"]))
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
    fitted, behind = _wired(stage, faults)
    return Board(
        fitted,
        behind,
        Sample(1, laws, sample.case_to_ambient_K_per_W),
        faults,
        heat,
        ambient_C + draw.uniform(-1.0, 1.0),
        draw.uniform(0.05, 0.25),
        draw.uniform(0, 6.28),
    )


def _wired(stage: Stage, faults: Mapping[str, float]) -> tuple[Stage, str]:
    """The stage with the nodes of a faulty board, and the node behind a dry joint."""
    parts, ports = dict(stage.wiring.parts), stage.ports
    first, *gate, last = parts[stage.main]
    if "wrong-way-round" in faults:
        first, last = last, first
    if gate and "gate-open" in faults and "open" not in faults:
        gate = [PIN]
    parts[stage.main] = (first, *gate, last)
    at = "exposed_plus" if _breaks_plus(ports) else "exposed_minus"
    behind = str(getattr(ports, at))
    if "dry-joint" in faults:
        ports = dataclasses.replace(ports, **{at: JOINT})
    return dataclasses.replace(stage, wiring=Wiring(parts, ports)), behind


def _breaks_plus(ports: Ports) -> bool:
    """Whether the stage sits in the plus lead; where it breaks none, whether that is not ground."""
    if ports.exposed_plus != ports.guarded_plus:
        return True
    return ports.exposed_minus == ports.guarded_minus and ports.exposed_plus != GROUND


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
        return MosfetLaws(channel, law.body)
    if isinstance(law, DiodeLaw) and "drop-shift" in faults:
        scale = float(law.ideality) * 0.02569
        law = dataclasses.replace(
            law, saturation_A=law.saturation_A * np.exp(-faults["drop-shift"] / scale)
        )
    return law
