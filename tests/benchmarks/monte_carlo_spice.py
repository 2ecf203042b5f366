"""The Monte Carlo of `pmos-sensed` for ngspice, in the two forms that run it fastest.

The devices are ngspice's compiled ones. Far above threshold the channel law is the square law of
its level 1 (which takes n = 1 where the law has 1.2: of a drop of tens of millivolts some 1e-4),
Ebers and Moll is its bipolar model without further parameters, and the diodes are its diodes;
leakage is left out: nanoamperes beside the hundred milliamperes and more of the sweep. Tolerances
are ngspice's defaults, which is enough.
"""

from __future__ import annotations

import subprocess
import time
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.bipolar import BipolarLaw
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.mosfet import MosfetLaws
from benchkit.parts.resistor import ResistorLaw
from benchkit.stage import Sample

Floats = NDArray[np.float64]

FORMS = ("altered", "side_by_side")
BLOCK = 50
"""Boards in one circuit: near the best of 10, 50 and 200."""
NAMES = ("vto", "kp", "rs", "body", "hold", "base", "isat", "gain", "rc", "dis", "drs")
ALTER = (
    "altermod mq1 vto", "altermod mq1 kp", "alter rs", "altermod db is", "alter rh", "alter rb",
    "altermod mq2 is", "altermod mq2 bf", "alter rc", "altermod dp is", "altermod dp rs",
)  # fmt: skip
BOARD = """m{k} dr{k} co{k} guarded guarded mq1{k} l=1 w=1
rs{k} e{k} dr{k} {rs}
d{k} e{k} guarded db{k}
rh{k} co{k} guarded {hold}
q{k} c2{k} b{k} 0 mq2{k}
rc{k} co{k} c2{k} {rc}
rb{k} e{k} b{k} {base}
dd{k} 0 b{k} dp{k}
.model mq1{k} pmos level=1 vto={vto} kp={kp} is=1e-30
.model db{k} d is={body} n={body_n} rs={body_rs}
.model mq2{k} npn is={isat} bf={gain} br={reverse}
.model dp{k} d is={dis} n={d_n} rs={drs}
.nodeset v(e{k})={near} v(b{k})=0.65 v(co{k})=0.1 v(c2{k})=0.1 v(dr{k})={near}
"""


class MonteCarlo:
    """Decks for the boards of a sample, written once, and runs of them."""

    def __init__(
        self, program: str, folder: Path, sample: Sample, supply_V: float, currents_A: Floats
    ) -> None:
        self.program, self.folder = program, folder
        self.boards, self.points = sample.size, currents_A.size
        self.supply_V = supply_V
        step = float(currents_A[1] - currents_A[0])
        assert np.allclose(np.diff(currents_A), step), "a sweep of ngspice has equal steps"
        self.sweep = f"{currents_A[0]:.10g} {currents_A[-1] + 0.01 * step:.10g} {step:.10g}"
        q1, q2, d1 = sample.laws["Q1"], sample.laws["Q2"], sample.laws["D1"]
        hold, base = sample.laws["R1"], sample.laws["R2"]
        assert isinstance(q1, MosfetLaws)
        assert isinstance(q2, BipolarLaw)
        assert isinstance(d1, DiodeLaw)
        assert isinstance(hold, ResistorLaw)
        assert isinstance(base, ResistorLaw)
        columns = (
            -np.asarray(q1.channel.threshold_V), q1.channel.gain_A_per_V2, q1.channel.series_ohm,
            q1.body.saturation_A, hold.ohms, base.ohms, q2.saturation_A, q2.forward_gain,
            q2.collector_ohm, d1.saturation_A, d1.series_ohm,
        )  # fmt: skip
        self.values = np.stack([np.broadcast_to(column, self.boards) for column in columns], axis=1)
        self.same = {
            "body_n": q1.body.ideality, "body_rs": float(np.max(q1.body.series_ohm)),
            "reverse": q2.reverse_gain, "d_n": d1.ideality, "near": supply_V - 0.05,
        }  # fmt: skip
        (folder / "altered.cir").write_text(self._altered(), encoding="ascii")
        (folder / "side_by_side.cir").write_text(self._side_by_side(), encoding="ascii")

    def drops(self, form: str) -> tuple[Floats, float]:
        """Drops of shape (boards, currents), and the seconds from deck to results."""
        out = self.folder / f"{form}.raw"
        out.unlink(missing_ok=True)
        begun = time.perf_counter()
        done = subprocess.run(
            [self.program, "-b", str(self.folder / f"{form}.cir")], capture_output=True,
            text=True, timeout=300, check=True, cwd=self.folder,
        )  # fmt: skip
        seconds = time.perf_counter() - begun
        assert out.exists(), done.stdout[-500:] + done.stderr[-500:]
        wide = 1 if form == "altered" else BLOCK
        blocks = [
            np.frombuffer(part[: self.points * (1 + wide) * 8]).reshape(self.points, 1 + wide)
            for part in out.read_bytes().split(b"Binary:\n")[1:]
        ]
        volts = np.concatenate([block[:, 1:].T for block in blocks])
        assert volts.shape == (self.boards, self.points)
        return self.supply_V - volts, seconds

    def _board(self, number: int, suffix: str) -> str:
        values = {
            name: f"{value:.10g}" for name, value in zip(NAMES, self.values[number], strict=True)
        }
        return BOARD.format(k=suffix, **values, **self.same)

    def _altered(self) -> str:
        lines = [
            "* one circuit, altered", f"vs guarded 0 {self.supply_V}", "i1 e 0 0.1",
            self._board(0, ""), ".options tnom=25 temp=25", ".control", "set appendwrite",
            "save v(e)",
        ]  # fmt: skip
        for row in self.values:
            lines += [f"{alter} = {value:.10g}" for alter, value in zip(ALTER, row, strict=True)]
            lines += [f"dc i1 {self.sweep}", "write altered.raw v(e)", "destroy all"]
        return "\n".join([*lines, "quit 0", ".endc", ".end", ""])

    def _side_by_side(self) -> str:
        """Blocks of boards that share the sweep, one circuit after the other in one run."""
        assert self.boards % BLOCK == 0
        control = ["* boards side by side", ".control", "set appendwrite"]
        for low in range(0, self.boards, BLOCK):
            numbers = range(low, low + BLOCK)
            lines = ["* block", f"vs guarded 0 {self.supply_V}", "is s 0 0.1", "rs s 0 1"]
            lines += [self._board(k, f"x{k}") + f"gx{k} ex{k} 0 0 s 1" for k in numbers]
            name = f"block{low}.cir"
            text = "\n".join([*lines, ".options tnom=25 temp=25", ".end", ""])
            (self.folder / name).write_text(text, encoding="ascii")
            nodes = " ".join(f"v(ex{k})" for k in numbers)
            control += [
                f"source {name}", f"save {nodes}", f"dc is {self.sweep}",
                f"write side_by_side.raw {nodes}", "destroy all", "remcirc",
            ]  # fmt: skip
        return "\n".join([*control, "quit 0", ".endc", ".end", ""])
