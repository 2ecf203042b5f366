"""Ways the exposed port can be connected, and what each part then stands.

Each scenario is solved over the tolerance samples, at the lowest and at the highest voltage that
can drive it and in the hottest ambient, and every rating is compared with the worst of them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.parts.fuse_points import FuseModel
from benchkit.prediction.connections import Conditions, Connection, Surroundings, levels
from benchkit.prediction.coordination import Coordination, worked_share
from benchkit.prediction.fuse import fuse_of, opening
from benchkit.prediction.heat import BEYOND_C, settled_junction
from benchkit.prediction.operating_point import OperatingPoint, connected, other_points, reached
from benchkit.prediction.part_state import own_elements
from benchkit.prediction.ratings import Rating, part_ratings, rating
from benchkit.prediction.sentences import protected, sentences
from benchkit.prefixes import spoken
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]

SOON_S = 1.0
"""A fuse that clears within this spares the parts their ratings of continuous current."""
NEGLIGIBLE_K = 0.05
"""A junction that its own loss warms by less than this stays at ambient."""


@dataclass(frozen=True)
class PartState:
    """What one part stands: the sample furthest from zero of each, with its sign."""

    voltage_V: float
    current_A: float
    power_W: float


@dataclass(frozen=True)
class Scenario:
    """Answers for one way of connecting.

    required: whether the stage must stand it. protected: the guarded side never sees more than a
    forward drop in reverse (or what a clamp leaves), and keeps what it holds of its own.
    junction_C: the main part's, hottest sample; None where a fuse ends it before that matters,
    infinite where it runs away.
    """

    name: str
    required: bool
    protected: bool
    exposed_current_A: float
    guarded_V: float
    parts: dict[str, PartState]
    ratings: list[Rating]
    notes: list[str]
    junction_C: float | None
    worst_residual: float
    fuse: Coordination | None

    @property
    def stands(self) -> bool:
        """Every rating holds, the guarded side is protected, and a fuse that has to open does."""
        rated = all(one.holds for one in self.ratings)
        return rated and self.protected and (self.fuse is None or self.fuse.coordinated)

    def document(self) -> dict[str, object]:
        """As JSON-ready values."""
        own = {**vars(self), "stands": self.stands, "parts": {}, "ratings": [], "fuse": None}
        return {
            **own,
            "parts": {reference: asdict(part) for reference, part in self.parts.items()},
            "ratings": [asdict(one) for one in self.ratings],
            "fuse": self.fuse.document() if self.fuse is not None else None,
        }


def scenario(stage: Stage, sample: Sample, name: str, around: Surroundings) -> Scenario:
    """Answer one scenario; ValueError for a name that is not in SCENARIOS."""
    at = conditions(stage, around, name, sample.size)
    boards = sample.repeated(at.volts.size // sample.size)
    steps = connected(stage, around, name, at)
    point, junction, away = _warm(stage, boards, steps)
    fuse = opening(stage, name, point)
    lasts = fuse is None or not fuse.clears_in_s <= SOON_S
    parts, ratings = {}, []
    for reference, nodes in stage.wiring.parts.items():
        states, part = point.part(reference), stage.file.parts[reference]
        parts[reference] = PartState(
            _furthest(states.voltage_V), _furthest(states.current_A), float(states.power_W.max())
        )
        own = own_elements(point.circuit.elements, reference)
        ratings += part_ratings(
            reference, part, nodes, states, own, point.solution.volts, lasts=lasts
        )
        own_rise = getattr(part, "junction_to_ambient_K_per_W", None)
        if reference != stage.main and own_rise is not None and lasts:
            warm = stage.file.stage.ambient_max_C + own_rise * states.power_W
            limit = float(getattr(part, "junction_max_C"))  # noqa: B009  of a WarmPart
            ratings.append(rating(reference, "junction temperature", "C", warm, limit))
    if lasts:
        limit = stage.main_part.junction_max_C
        ratings.append(rating(stage.main, "junction temperature", "C", junction, limit))
    ratings += _fuse_ratings(stage, parts, fuse)
    notes = [one.sentence() for one in ratings if not one.holds and np.isfinite(one.value)]
    if lasts and away.any():
        notes.append(
            f"{stage.main} has no steady temperature below {BEYOND_C:.0f} °C in some boards within "
            "tolerance: it runs away or burns"
        )
    notes += fuse.notes if fuse is not None else ()
    safe = protected(name, around, point)
    outlived = all(one.holds for one in ratings) and (fuse is None or fuse.coordinated)
    notes += sentences(around, name, point, fuse, outlived=outlived)
    notes += _others(stage, around, name)
    return Scenario(
        name, name in stage.must_stand, safe, _furthest(point.exposed_A), _guarded(name, point),
        parts, ratings, notes, float(junction.max()) if lasts else None,
        float(point.solution.residual.max()), fuse,
    )  # fmt: skip


def conditions(stage: Stage, around: Surroundings, name: str, boards: int) -> Conditions:
    """Every voltage that drives a scenario, for each board in a row."""
    volts = np.tile(np.array(levels(stage, around, name)), boards)
    return Conditions(volts, np.full(volts.size, stage.file.stage.current_max_A))


def _warm(
    stage: Stage, boards: Sample, steps: Sequence[Connection]
) -> tuple[OperatingPoint, Floats, NDArray[np.bool_]]:
    """The operating point with its main part as warm as it makes itself."""
    ambient = stage.file.stage.ambient_max_C
    whole = boards.case_to_ambient_K_per_W + stage.junction_to_case_K_per_W
    point = reached(stage, boards, steps, ambient, ambient)
    rise = whole * point.part(stage.main).power_W
    if rise.max() < NEGLIGIBLE_K:
        return point, ambient + rise, np.zeros(rise.shape, dtype=bool)
    volts = point.solution.volts

    def loss(junction: Floats) -> Floats:
        found = [
            reached(stage, boards, steps, column, ambient, volts).part(stage.main).power_W
            for column in junction.T
        ]
        return np.stack(found, axis=1)

    junction, away = settled_junction(loss, np.full((boards.size, 1), ambient), whole[:, None])
    warm = junction[:, 0]
    # What no part outlives is shown as it begins, before it has warmed.
    lost = away[:, 0]
    shown = np.where(lost | (warm > stage.main_part.junction_max_C), ambient, warm)
    final = reached(stage, boards, steps, shown, ambient, volts)
    return final, np.where(lost, np.inf, warm), lost


def _fuse_ratings(
    stage: Stage, parts: dict[str, PartState], fuse: Coordination | None
) -> list[Rating]:
    """Its own ratings, and the clamp's surge where it opens."""
    reference = fuse_of(stage)
    if reference is None:
        return []
    model = stage.models[reference]
    assert isinstance(model, FuseModel)
    part = model.part
    if fuse is None:
        amps = abs(parts[reference].current_A)
        most = part.rated_current_A * worked_share(model, stage.file.stage.ambient_max_C)
        return [rating(reference, "continuous current", "A", amps, most)]
    found = [
        rating(reference, "voltage to break", "V", fuse.voltage_V, part.rated_voltage_V),
        rating(reference, "breaking capacity", "A", fuse.prospective_A, part.breaking_A),
    ]
    if fuse.clamp_A2s is not None:
        found.append(rating(stage.main, "surge I2t", "A2s", fuse.let_through_A2s, fuse.clamp_A2s))
    return found


def _guarded(name: str, point: OperatingPoint) -> float:
    """The end of the range that matters: highest where a battery feeds back, else lowest."""
    volts = point.guarded_V
    return float(volts.max() if name == "back-feed" else volts.min())


def _furthest(values: Floats) -> float:
    return float(values[np.argmax(np.abs(values))])


def _others(stage: Stage, around: Surroundings, name: str) -> list[str]:
    """Say where a typical board has a further operating point."""
    at = conditions(stage, around, name, 1)
    boards = stage.typical().repeated(at.volts.size)
    ambient = stage.file.stage.ambient_nominal_C
    point = reached(stage, boards, connected(stage, around, name, at), ambient, ambient)
    highest = max(float(at.volts.max()), around.set_V, around.hold_V)
    return [_another(point, found) for found in other_points(point, highest)]


def _another(point: OperatingPoint, found: OperatingPoint) -> str:
    """Two operating points in a few words, at the voltage where they differ most."""
    apart = [np.abs(point.solution.volts[n] - v) for n, v in found.solution.volts.items()]
    at = int(np.argmax(np.max(apart, axis=0)))

    def described(of: OperatingPoint) -> str:
        amps, volts = spoken(float(of.exposed_A[at]), "A"), spoken(float(of.guarded_V[at]), "V")
        return f"{amps} into the exposed port and the guarded side at {volts}"

    return (
        f"there is another operating point, with {described(found)}, instead of "
        f"{described(point)}: a disturbance may leave the stage there"
    )


__all__ = ["BEYOND_C", "PartState", "Scenario", "conditions", "scenario"]
