"""What the data of a run mean, in sentences for the person at the bench."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.hottest import Hottest
from benchkit.evaluation.soak import Soak
from benchkit.evaluation.sources import accuracy_of
from benchkit.evaluation.sweep import DropAt, Sweep, junctions_C
from benchkit.fits.drop import diagnose
from benchkit.metrology import Accuracy
from benchkit.prediction.forward import forward
from benchkit.prediction.ratings import Rating
from benchkit.prediction.scenarios import Scenario
from benchkit.records.record import Record
from benchkit.stage import Stage

HEAT_SHARE = 0.02
"""Every sweep warms its part a little, and good meters see it: worth a sentence from here on."""


LAW_SHARE = 1e-3
"""The laws of the parts are not exact to better than this share of the largest drop: what they
leave over below it is not a sign of anything."""
FAULTS = {"gate-not-driven", "shorted", "open"}
DOUBTS = {"too-few"}

Weight = Literal["fault", "doubt", "note"]


NOTHING_V = 1e-6


@dataclass(frozen=True)
class Remark:
    """A sentence, and what it does to the verdict: a fault fails the run, a doubt keeps it from
    passing whatever the limits say, a note is only told."""

    weight: Weight
    text: str


def remarks_of(
    record: Record,
    stage: Stage,
    scenarios: Sequence[Scenario],
    sweep: Sweep | None,
    drops: Sequence[DropAt],
    soak: Soak | None,
    extreme: Hottest | None,
) -> list[Remark]:
    """What the data of sweep and soak mean; empty when there is nothing to remark."""
    kinds = ("found-on", "sweep-cut", "soak-skipped")
    told = [Remark("note", text) for kind in kinds for text in record.said(kind)]
    told += _of_ratings(scenarios, measured_heat=extreme is not None)
    if sweep is not None:
        told += _of_sweep(record, stage, sweep)
        told += of_band(stage, drops)
    if soak is not None and not soak.heating.usable:
        why = soak.heating.why
        told.append(Remark("note", f"the soak does not say where the rise ends: {why}"))
    if soak is not None and extreme is not None and record.stage.soak is not None:
        reach = record.stage.soak.loss_reach
        if extreme.reach > reach:
            told.append(
                Remark(
                    "note",
                    f"the hottest case is extrapolated to {extreme.reach:.2g} times the measured "
                    f"loss, more than soak.loss_reach = {reach:g} allows; soak at a higher current",
                )
            )
        if np.isnan(extreme.junction_C):
            told.append(
                Remark("fault", "at the highest current and ambient this board would run away")
            )
    return told


def gravest_first(remarks: Sequence[Remark]) -> list[Remark]:
    """Faults, then doubts, then notes, each in the order given."""
    order: list[Weight] = ["fault", "doubt", "note"]
    return sorted(remarks, key=lambda remark: order.index(remark.weight))


def _of_ratings(scenarios: Sequence[Scenario], *, measured_heat: bool) -> list[Remark]:
    """A stage that takes a part beyond its sheet is not passed by measuring how well it works.

    The junction's temperature is left to the measured one where there is one.
    """
    return [
        Remark(
            "doubt",
            f"{r.part}: its {r.rating} {_reaches(r)} ({found.name}), beyond its "
            f"rating of {r.limit:.4g} {r.unit}: the stage as its file describes it does not keep "
            "its parts inside their datasheets",
        )
        for found in scenarios
        for r in found.ratings
        if not r.holds and not (measured_heat and r.rating == "junction temperature")
    ]


def _reaches(one: Rating) -> str:
    return f"can reach {one.value:.4g} {one.unit}" if math.isfinite(one.value) else "runs away"


def of_band(stage: Stage, drops: Sequence[DropAt]) -> list[Remark]:
    """Is this the part that the stage file says? Limits alone cannot tell: a short across a diode
    meets every upper limit of its drop."""
    amps = np.array([d.current_A for d in drops])
    junction = junctions_C(drops, stage.junction_to_case_K_per_W)
    supply = stage.file.stage.supply_nominal_V
    least, most = (
        forward(stage, stage.corner(way), amps, supply, junction).drop_V[0] for way in (-1, 1)
    )
    told = []
    for way, words, cause in (
        (-1, "less than the least", "another part, or something conducting across it"),
        (1, "more than the most", "another part, a dry joint, or a gate that is not fully driven"),
    ):
        outside = [
            (d, float(edge))
            for d, edge in zip(drops, least if way < 0 else most, strict=True)
            if way * (d.drop_V - edge) > d.budget.expanded().U
        ]
        if outside:
            # The furthest in proportion; a path of nothing but copper is promised to drop nothing.
            drop, edge = max(
                outside, key=lambda pair: way * pair[0].drop_V / max(pair[1], NOTHING_V)
            )
            told.append(
                Remark(
                    "doubt",
                    f"at {drop.current_A:g} A it drops {drop.drop_V:.4g} V, {words} that the "
                    f"datasheets' tolerances allow ({edge:.4g} V): suspect {cause}",
                )
            )
    return told


def _of_sweep(record: Record, stage: Stage, sweep: Sweep) -> list[Remark]:
    told = []
    for name, zero in (("drop", sweep.drop_zero), ("exposed_current", sweep.current_zero)):
        if not zero.used:
            told.append(
                Remark(
                    "note",
                    f"the zero of {name} reads {zero.value:.3g}, more than an offset of the meter "
                    "can be, or was not taken twice on the sweep's range: it was not taken off, "
                    "and the declared offset stays in the uncertainty",
                )
            )
    shunt = record.bench.points["exposed_current"].shunt_ohm or 1.0
    current = accuracy_of(record.bench, "exposed_current", sweep.current_range_V)
    tolerance = record.bench.points["exposed_current"].shunt_tolerance_percent
    found = diagnose(
        "junction" if stage.conducts == "junction" else "channel",
        sweep.current_A,
        sweep.drop_V,
        junction_of(stage, sweep),
        u_noise_V=max(sweep.drop_zero.noise, LAW_SHARE * float(np.max(np.abs(sweep.drop_V)))),
        rising=sweep.rising,
        alpha_per_K=temperature_coefficient(stage),
        drop_accuracy=accuracy_of(record.bench, "drop", sweep.drop_range_V),
        current_accuracy=Accuracy(
            current.range / shunt, current.reading_percent + tolerance, current.range_percent
        ),
        compliance_V=record.stage.stage.supply_nominal_V,
    )
    # A part that is not what it should be is not asked whether it also warmed.
    broken = {f.kind for f in found} & FAULTS
    warmed = not broken and _spread_share(sweep) > HEAT_SHARE
    for finding in found:
        if finding.kind in ("heat", "drift") and not warmed:
            continue
        if finding.kind == "lead-or-contact" and "fuse" in stage.names:
            continue  # a fuse's resistance grows with its current: no straight line
        weight: Weight = "note"
        if finding.kind in FAULTS | DOUBTS:
            weight = "fault" if finding.kind in FAULTS else "doubt"
        told.append(Remark(weight, finding.text))
    return told


def _spread_share(sweep: Sweep) -> float:
    """The largest difference between up and down at one current, as a share of the drop."""
    return max(
        float(np.ptp(sweep.drop_V[v]) / abs(sweep.drop_V[v].mean()))
        for v in (sweep.visits(t) for t in sweep.targets)
    )


def junction_of(stage: Stage, sweep: Sweep) -> NDArray[np.float64]:
    """Junction temperature at each visit: left at the case's, its rise with the current would bend
    a channel's straight line into one with an intercept."""
    return sweep.case_C + stage.junction_to_case_K_per_W * sweep.loss_W


def temperature_coefficient(stage: Stage) -> float:
    """Relative rise of the drop per kelvin near 25 C, from the datasheet's law."""
    if stage.conducts != "channel":
        return 0.0
    working = stage.file.stage
    drops = forward(
        stage,
        stage.typical(),
        working.current_nominal_A,
        working.supply_nominal_V,
        np.array([25.0, 45.0]),
    ).drop_V[0]
    return float((drops[1] / drops[0] - 1) / 20.0)
