"""Random faults: of a board, of the bench around it, of its instruments and their links."""

from __future__ import annotations

import math
import random
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from benchkit.errors import InputError
from instruments.simulated import INSTRUMENT_FAULTS
from instruments.simulated.armed import RESISTANCES, WIRING_FAULTS
from instruments.simulated.board import parse_faults
from instruments.simulated.board_faults import BOARD_FAULTS, check_faults
from tests.campaigns.faults_shop import FITTINGS, STAGES, Fitting, stage_of

CHUNK = 60
"""Trials that share one simulated bench; its fitting is of the chunk."""
SOUND_SHARE, AT_OPENING_SHARE, FROM_START_SHARE = 0.05, 0.06, 0.08
SELDOM = {"pmos-sensed": 0.15, "nmos-sensed": 0.15, "series-diode-battery": 0.5}
"""Stages that take many times as long as the others, drawn so much less often."""
REFUSED = {
    ("fused-clamp", "supply-list"): "series-diode",
    ("fused-clamp-battery", "supply-list"): "series-diode",
}
"""Stages that no bench with such a supply plans, as it should be, and what is done instead."""
KINDS = ("board", "wiring", "instrument")
WEIGHTS = (0.30, 0.25, 0.45)
NEEDS = {
    "switch": ("relay-stuck", "relay-lying"),
    "supply": ("stuck-output", "lying-output"),
    "battery": ("stuck-output", "lying-output"),
}
OF_ONE = frozenset(kind for kinds in NEEDS.values() for kind in kinds)
"""Faults that only some instruments can have."""
COUNTED = ("lost-answer", "garbage", "truncated", "dropped-peer", "queue-error")
SPREAD: dict[str, tuple[float, float]] = {
    "rds-on-scale": (0.4, 8.0), "dry-joint": (1e-3, 100.0), "leaky": (3.0, 1e6),
    "heat-scale": (0.2, 6.0), "fuse-too-large": (1.2, 20.0), "lead-resistance": (0.01, 30.0),
    "battery-lead-resistance": (0.01, 30.0), "late-answer": (0.02, 1.4),
}  # fmt: skip
"""Values are drawn over this, evenly in their logarithm."""


@dataclass(frozen=True)
class Fault:
    """One fault. share: when it strikes, as a share of what a sound run takes; of a board: never
    mind."""

    kind: Literal["board", "wiring", "instrument"]
    name: str
    value: float
    share: float = 0.0

    def spelled(self) -> str:
        """As in a bench file."""
        return f"{self.name}={self.value:.6g}"

    @property
    def family(self) -> str:
        """Its name without that of the instrument; points stay."""
        if self.kind != "instrument":
            return self.name
        return self.name.partition(":")[0]


@dataclass(frozen=True)
class Trial:
    """What one trial does. at_opening: its faults are there before the bench is opened."""

    number: int
    stage: str
    fitting: Fitting
    faults: tuple[Fault, ...]
    at_opening: bool

    @property
    def serial(self) -> str:
        """Of its board."""
        return f"B-{self.number}"

    def of(self, kind: str) -> list[Fault]:
        """Its faults of one kind."""
        return [fault for fault in self.faults if fault.kind == kind]

    def sentence(self) -> str:
        """For people."""
        told = [
            fault.spelled() + ("" if fault.kind == "board" else f"@{fault.share:.4f}")
            for fault in self.faults
        ]
        where = f"{self.stage} on {self.fitting.supply}{'+relays' if self.fitting.relays else ''}"
        opening = ", from before the opening" if self.at_opening else ""
        return f"trial {self.number} ({where}): {', '.join(told) or 'no fault'}{opening}"


def draw_trial(seed: int, number: int, stages: Sequence[str] = tuple(STAGES)) -> Trial:
    """Trial ``number`` of a campaign: the same for the same seed, whatever was done before."""
    rng = random.Random(f"{seed}|{number}")
    (stage,) = rng.choices(stages, [SELDOM.get(name, 1.0) for name in stages])
    fitting = fitting_of(number)
    if (stage, fitting.supply) in REFUSED:
        stage = REFUSED[stage, fitting.supply]
    if rng.random() < SOUND_SHARE:
        return Trial(number, stage, fitting, (), False)
    if rng.random() < AT_OPENING_SHARE:
        return Trial(number, stage, fitting, (_of_instrument(rng, fitting),), True)
    count = 1 if rng.random() < 0.6 else 2
    faults: list[Fault] = []
    while len(faults) < count:
        (kind,) = rng.choices(KINDS, WEIGHTS)
        if kind == "board":
            fault = _of_board(rng, stage)
        elif kind == "wiring":
            fault = _of_wiring(rng, fitting)
        else:
            fault = _of_instrument(rng, fitting)
        if all(fault.name != other.name for other in faults):
            faults.append(fault)
    return Trial(number, stage, fitting, tuple(faults), False)


def fitting_of(number: int) -> Fitting:
    """Of the bench that a trial is done on."""
    return FITTINGS[number // CHUNK % len(FITTINGS)]


def _of_board(rng: random.Random, stage: str) -> Fault:
    built = stage_of(stage)
    while True:
        name = rng.choice(list(BOARD_FAULTS))
        fault = Fault("board", name, _value(rng, name))
        try:
            check_faults(built, parse_faults([fault.spelled()]), stage)
        except InputError:
            continue
        return fault


def _of_wiring(rng: random.Random, fitting: Fitting) -> Fault:
    name = rng.choice([n for n in WIRING_FAULTS if fitting.relays or n != "loop-open"])
    return Fault("wiring", name, _value(rng, name), _share(rng))


def _of_instrument(rng: random.Random, fitting: Fitting) -> Fault:
    family = rng.choice([pattern.partition(":")[0] for pattern in INSTRUMENT_FAULTS])
    able = [name for name in fitting.instruments if _can(name, family)]
    if not able:
        return _of_instrument(rng, fitting)
    value = _value(rng, family)
    if family.startswith("relay-"):
        value = float(rng.choice([1, 301, 302, 303]))
    return Fault("instrument", f"{family}:{rng.choice(able)}", value, _share(rng))


def _can(instrument: str, family: str) -> bool:
    return family not in OF_ONE or family in NEEDS.get(instrument, ())


def _value(rng: random.Random, name: str) -> float:
    if name in SPREAD:
        low, high = SPREAD[name]
        return math.exp(rng.uniform(math.log(low), math.log(high)))
    if name in RESISTANCES:
        return rng.uniform(0.01, 10.0)
    if name in COUNTED:
        return float(rng.choice([1, 1, 2, 5, 100]))
    if name == "drop-shift":
        return rng.choice([-1, 1]) * rng.uniform(0.02, 0.4)
    if name == "wrong-part":
        return rng.choice([-1, 1]) * rng.uniform(0.3, 3.0)
    return 1.0


def _share(rng: random.Random) -> float:
    return 0.0 if rng.random() < FROM_START_SHARE else rng.random()
