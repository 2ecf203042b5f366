"""The page of a prediction: what a stage stands by its datasheets, to be printed and signed."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from benchkit.prediction.coordination import Coordination
from benchkit.prediction.curves import Curves, curves
from benchkit.prediction.predict import DropRow, Prediction
from benchkit.prediction.ratings import Rating
from benchkit.prediction.scenarios import Scenario
from benchkit.reports.pages import render
from benchkit.reports.prediction_figures import lettered, panels, prediction_figure
from benchkit.reports.prediction_words import (
    GUARDS,
    ROLES,
    SCENARIOS,
    TOPOLOGIES,
    in_words,
    label,
    margin,
    quantity,
    said,
    spelled,
)
from benchkit.reports.schematic import Sketch, schematic_svg
from benchkit.reports.words import NONE
from benchkit.stage import Stage

AWAY = "runs away"


@dataclass(frozen=True)
class RatingRow:
    """One rating as the tables show it."""

    part: str
    rating: str
    value: str
    limit: str
    margin: str
    holds: bool


@dataclass(frozen=True)
class ScenarioRow:
    """One scenario as the tables show it; ``breaches`` is what does not hold, in words."""

    name: str
    words: str
    required: bool
    exposed: str
    guarded: str
    junction: str
    tightest: RatingRow | None
    breaches: list[str]
    sentences: list[str]
    fuse: str
    ratings: list[RatingRow]
    parts: list[tuple[str, str, str, str]]

    @property
    def title(self) -> str:
        """The words as a heading."""
        return self.words[0].upper() + self.words[1:]

    @property
    def verdict(self) -> str:
        """In words that differ without their colour."""
        if not self.breaches:
            return "holds"
        return "DOES NOT HOLD" if self.required else "does not hold (not asked)"


def prediction_page(stage: Stage, prediction: Prediction) -> str:
    """A prediction as self-contained HTML, the same bytes for the same stage and prediction."""
    from markupsafe import Markup

    drawn = curves(stage, prediction.highest_gate_supply_V)
    found = panels(stage, prediction, drawn)
    rows = [_scenario(one) for one in prediction.scenarios]
    asked = [row for row in rows if row.required]
    wrong = [row for row in asked if row.breaches]
    working = stage.file.stage
    picture = ""
    if stage.topology is not None:
        picture = schematic_svg(
            working.topology,
            {
                role: Sketch(reference, stage.file.parts[reference].kind,
                             label(stage.file.parts[reference]))
                for role, reference in stage.names.items()
            },
        )  # fmt: skip
    return render(
        "prediction.j2",
        p=prediction, working=working, topology=TOPOLOGIES[working.topology],
        guards=GUARDS[stage.guards], conducts=stage.conducts, q=quantity, said=said,
        verdict="undecided" if not asked else "fail" if wrong else "pass",
        asked=asked, wrong=wrong,
        besides=[row for row in rows if row.breaches and not row.required],
        expected=list(_expected(stage, prediction, drawn)),
        picture=Markup(picture), parts=list(_parts(stage)), wired=list(_wired(stage)),
        figure=Markup(prediction_figure(found)), letters=lettered(found), curves=drawn,
        some_away=not all(math.isfinite(row.corner_high_V + row.high_V) for row in prediction.drop),
        drops=[_drop(row) for row in prediction.drop], scenarios=rows,
    )  # fmt: skip


def _scenario(one: Scenario) -> ScenarioRow:
    tightest = min(one.ratings, key=_share_left, default=None)
    return ScenarioRow(
        one.name, SCENARIOS[one.name], one.required, quantity(one.exposed_current_A, "A"),
        quantity(one.guarded_V, "V"),
        "fuse opens first" if one.junction_C is None
        else AWAY if math.isinf(one.junction_C) else quantity(one.junction_C, "C"),
        None if tightest is None else _rating(tightest),
        list(_breaches(one)), [said(note) for note in one.notes],
        "" if one.fuse is None else _fuse(one.fuse),
        [_rating(r) for reference in one.parts for r in one.ratings if r.part == reference],
        [
            (reference, quantity(part.voltage_V, "V"), quantity(part.current_A, "A"),
             quantity(part.power_W, "W"))
            for reference, part in one.parts.items()
        ],
    )  # fmt: skip


def _share_left(rating: Rating) -> float:
    return rating.margin / rating.limit if rating.limit > 0 else -math.inf


def _rating(one: Rating) -> RatingRow:
    away = not math.isfinite(one.value)
    left = max(one.margin, 0.0) if one.holds else one.margin
    return RatingRow(
        one.part, spelled(one.rating),
        AWAY if away else quantity(one.value, one.unit), quantity(one.limit, one.unit),
        "none" if away else margin(left, one.unit), one.holds,
    )  # fmt: skip


def _breaches(one: Scenario) -> Iterator[str]:
    """Every rating that does not hold, a fuse that does not save, a guarded side not guarded."""
    broken = [_rating(rating) for rating in one.ratings if not rating.holds]
    for row in broken:
        yield f"{row.part} {row.rating} {row.value}, rated {row.limit}"
    if one.fuse is not None and not one.fuse.coordinated and not broken:
        yield "the fuse is not coordinated"
    if not one.protected:
        yield f"the guarded side is pulled to {quantity(one.guarded_V, 'V')}"


def _fuse(fuse: Coordination) -> str:
    """What the fuse does, in one sentence."""
    word = "The fuse is coordinated" if fuse.coordinated else "The fuse is NOT COORDINATED"
    breaks = (
        f"it can break {quantity(fuse.breaking_A, 'A')} of the "
        f"{quantity(fuse.prospective_A, 'A')} that can flow into a short"
    )
    if not math.isfinite(fuse.clears_in_s):
        sure = quantity(fuse.surely_opens_A, "A")
        return (
            f"{word}: at {quantity(fuse.current_A, 'A')} it may never open, as it is sure to from "
            f"{sure} on only; {breaks}."
        )
    stands = (
        "no surge rating of the clamp is given" if fuse.clamp_A2s is None
        else f"the clamp stands {quantity(fuse.clamp_A2s, 'A2s')}"
    )  # fmt: skip
    return (
        f"{word}: from {quantity(fuse.current_A, 'A')} on it clears within "
        f"{quantity(fuse.clears_in_s, 's')} and lets through up to "
        f"{quantity(fuse.let_through_A2s, 'A2s')}; {stands}; {breaks}."
    )


def _expected(stage: Stage, p: Prediction, drawn: Curves) -> Iterator[tuple[str, str]]:
    """The figures that an engineer asks for first."""
    working = stage.file.stage
    amps, volts = quantity(working.current_nominal_A, "A"), quantity(working.supply_nominal_V, "V")
    # The table's own figures where it has them: they come from more boards than the curve.
    rows = {row.current_A: (row.nominal_V, row.low_V, row.high_V) for row in p.drop}
    typical, low, high = rows.get(
        working.current_nominal_A, drawn.nominal_drop(working.current_nominal_A)
    )
    at = f"at {amps}, {volts}, {quantity(working.ambient_nominal_C, 'C')}"
    band = (
        f"; 95 % of boards {quantity(low, 'V', whole=True)} to {quantity(high, 'V', whole=True)}"
        if math.isfinite(high) else "; some boards within tolerance run away"
    )  # fmt: skip
    if stage.conducts == "lead" and not typical:
        yield "Forward drop", "none: the working current meets no part of this stage"
    else:
        usual = quantity(typical, "V", whole=True) if math.isfinite(typical) else AWAY
        yield "Forward drop", f"{usual} typical{band}; {at}"
    worst = (
        f"at {quantity(working.current_max_A, 'A')}, {quantity(working.supply_min_V, 'V')}, "
        f"{quantity(working.ambient_max_C, 'C')}"
    )
    if p.runs_away:
        yield "Hottest", f"RUNS AWAY in some boards within tolerance; {worst}"
    else:
        yield (
            "Hottest",
            (
                f"{stage.main} case {quantity(p.case_C, 'C')}, junction "
                f"{quantity(p.junction_C, 'C')} of "
                f"{quantity(stage.main_part.junction_max_C, 'C')}; {worst}; "
                "97.5 % of boards are cooler"
            ),
        )
    if p.lowest_useful_supply_V is not None:
        yield (
            "Lowest useful supply",
            (
                f"{p.lowest_useful_supply_V:.1f} V for every board within tolerance: below it the "
                "drop has grown by half"
            ),
        )
    if p.highest_gate_supply_V is not None:
        most, highest = working.supply_max_V, p.highest_gate_supply_V
        if not math.isfinite(highest):
            text = f"none: the gate stands {quantity(2 * most, 'V')}, twice what is asked, and more"
        elif highest < most:
            text = f"{highest:.1f} V, LESS than the {quantity(most, 'V')} it is meant for"
        else:
            text = f"{highest:.1f} V for every board within tolerance"
        yield "Highest supply for the gate", text
    if p.fuse is not None:
        margin_ = f"{p.fuse.nuisance_margin:.2g} times what flows in normal use"
        yield (
            "Weakest fuse action",
            (
                f"{_fuse(p.fuse)} In the hottest ambient it carries "
                f"{quantity(p.fuse.working_allowed_A, 'A')} for good, {margin_}."
            ),
        )


def _drop(row: DropRow) -> tuple[str, ...]:
    def volts(value: float) -> str:
        return quantity(value, "V", whole=True) if math.isfinite(value) else AWAY

    typical = math.isfinite(row.nominal_V)
    return (
        quantity(row.current_A, "A"), volts(row.nominal_V),
        f"{volts(row.low_V)} to {volts(row.high_V)}" if math.isfinite(row.high_V)
        else "some run away",
        f"{volts(row.corner_low_V)} to {volts(row.corner_high_V)}"
        if math.isfinite(row.corner_high_V) else f"one {AWAY}",
        quantity(row.loss_W, "W", whole=True) if typical else NONE,
        quantity(row.junction_C, "C") if typical else AWAY,
    )  # fmt: skip


def _parts(stage: Stage) -> Iterator[tuple[str, str, str]]:
    roles = {reference: role for role, reference in stage.names.items()}
    for reference, part in stage.file.parts.items():
        role = ROLES[roles[reference]] if reference in roles else ""
        if reference == stage.main:
            role = f"{role}, watched for warmth" if role else "watched for warmth"
        yield reference, role, in_words(part)


def _wired(stage: Stage) -> Iterator[tuple[str, Sequence[tuple[str, str]]]]:
    """Of a circuit of one's own: each part's terminals and the nodes they are wired to."""
    for entry in stage.file.network:
        yield entry.part, list(entry.nodes().items())
