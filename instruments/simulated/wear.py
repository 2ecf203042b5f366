"""What the current does to a board for good: fuses that melt, a main part that dies.

A junction that carries more than its continuous rating spends its surge rating: what flows beyond
that rating, squared, in one pulse. Once that is more than the printed I2t by a drawn margin, it is
a short. So is any main part, a MOSFET too, whose junction gets too hot. Nothing else kills a part
here: not a voltage, and not the gate's.
"""

from __future__ import annotations

import math
import random
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from benchkit.files.parts import Diode, Tvs
from benchkit.parts.fuse import FuseLaw
from benchkit.placing import Law
from benchkit.stage import Stage
from instruments.simulated.melting import MeltingFuse

SURGE_MARGIN = (1.2, 2.0)
"""Parts stand more than their sheet says (judgement)."""
HOTTEST_C, HEAT_MARGIN_K = 175.0, (15.0, 60.0)
"""A junction survives its limit, and this one, by so much (judgement)."""
PART = 0.25
FINEST_S = 20e-6
"""Steps are at most this part of the time until something changes, and no finer than that."""


@dataclass
class Endurance:
    """What the main part has left.

    surge_A2s: None where none is printed. continuous_A: what it carries without spending any.
    """

    hottest_C: float
    surge_A2s: float | None = None
    continuous_A: float = 0.0
    spent_A2s: float = 0.0
    dead: bool = False

    def until_change_s(self, current_A: float) -> float:
        """How long this current has to flow until the part is a short."""
        above = current_A**2 - self.continuous_A**2
        if self.dead or self.surge_A2s is None or above <= 0:
            return math.inf
        return max(0.0, self.surge_A2s - self.spent_A2s) / above

    def pass_time(self, seconds: float, current_A: float, junction_C: float) -> None:
        """Let a constant current flow for a while."""
        above = current_A**2 - self.continuous_A**2
        self.spent_A2s = max(0.0, self.spent_A2s + above * seconds) if above > 0 else 0.0
        self.dead |= junction_C > self.hottest_C or (
            self.surge_A2s is not None and self.spent_A2s >= self.surge_A2s * (1 - 1e-9)
        )


@dataclass
class Wear:
    """Of one board. fine: its fate hangs on the moment at which a current changes."""

    part: Endurance
    fuses: Mapping[str, MeltingFuse] = field(default_factory=dict)
    fine: bool = False

    @property
    def spends(self) -> bool:
        """Whether anything here wears by its current, and not by heat alone."""
        return bool(self.fuses) or self.part.surge_A2s is not None

    @property
    def opened(self) -> list[str]:
        """The references of fuses that are open."""
        return [reference for reference, fuse in self.fuses.items() if fuse.is_open]

    def step_s(self, fuse_A: Mapping[str, float], part_A: float) -> float:
        """A time in which these currents still agree with what they flow through."""
        until = min(
            self.part.until_change_s(part_A),
            *(fuse.until_change_s(fuse_A[name]) for name, fuse in self.fuses.items()),
            math.inf,
        )
        return until if until <= FINEST_S else max(PART * until, FINEST_S)

    def pass_time(
        self, seconds: float, fuse_A: Mapping[str, float], part_A: float, junction_C: float
    ) -> bool:
        """Let constant currents flow for a while; True when the circuit is another one now."""
        if not self.fuses:
            alive = not self.part.dead
            self.part.pass_time(seconds, part_A, junction_C)
            return alive and self.part.dead
        before = self.part.dead, self.opened
        self.part.pass_time(seconds, part_A, junction_C)
        for reference, fuse in self.fuses.items():
            fuse.pass_time(seconds, fuse_A[reference])
        return before != (self.part.dead, self.opened)


def make_wear(
    stage: Stage, laws: Mapping[str, Law], draw: random.Random, *, missing: bool, bridged: bool
) -> Wear:
    """Of a new board: its fuses are cold, or not there."""
    part = stage.main_part
    margin, hotter = draw.uniform(*SURGE_MARGIN), draw.uniform(*HEAT_MARGIN_K)
    endurance = Endurance(max(HOTTEST_C, part.junction_max_C) + hotter)
    if isinstance(part, Diode | Tvs) and part.surge_A2s is not None:
        endurance.surge_A2s = part.surge_A2s * margin
        endurance.continuous_A = part.average_current_max_A
    fuses = {
        reference: MeltingFuse(_single(law), missing)
        for reference, law in laws.items()
        if isinstance(law, FuseLaw) and not bridged
    }
    return Wear(endurance, fuses, bool(fuses) or stage.conducts == "lead")


def _single(law: FuseLaw) -> FuseLaw:
    numbers = (law.cold_ohm, law.hot_ratio, law.fusing_A, law.melting_s, law.arcing_A2s)
    return FuseLaw(*(float(np.ravel(number)[0]) for number in numbers))
