"""`predict`: what the datasheets promise, on the terminal, as JSON, and as a page to print."""

from __future__ import annotations

import json
import math
import sys
from pathlib import Path

from rich.console import Console
from rich.table import Table

from benchkit.errors import InputError
from benchkit.files import StageFile, load
from benchkit.prediction.coordination import Coordination
from benchkit.prediction.predict import Prediction, predict
from benchkit.prediction.ratings import Rating
from benchkit.prediction.scenarios import Scenario
from benchkit.prefixes import lasting, spoken
from benchkit.records.run_folder import write_text
from benchkit.stage import build_stage
from procedures.tell import print_table

TABLE_WIDTH = 106


def show_prediction(path: Path, page: Path | None, *, as_json: bool) -> int:
    """Print the prediction of a stage file, and write its page where one is asked for."""
    stage = build_stage(load(StageFile, path), str(path))
    if page is not None and (page.is_dir() or not page.parent.is_dir()):
        raise InputError(f"{page}: it must be a file in a folder that exists, such as page.html")
    prediction = predict(stage)
    if page is not None:
        from benchkit.reports.prediction import prediction_page

        write_text(page, prediction_page(stage, prediction))
    if as_json:
        document = prediction.document()
        json.dump(_finite(document), sys.stdout, indent=1, ensure_ascii=False, allow_nan=False)
        sys.stdout.write("\n")
        return 0
    console = Console(highlight=False)
    _show(console, prediction)
    if page is not None:
        console.print(f"page  {page}", markup=False, soft_wrap=True)
    return 0


def _show(console: Console, p: Prediction) -> None:
    console.print(f"{p.stage} ({p.topology})", style="bold", markup=False)
    c = p.conditions
    console.print(
        f"steady state at {c['supply_nominal_V']:g} V and {c['ambient_nominal_C']:g} °C ambient; "
        f"the band holds 95 % of {c['samples']:g} boards drawn from the tolerances",
        markup=False,
    )
    table = Table(box=None, padding=(0, 1), header_style="bold")
    heads = ("current A", "drop mV", "band mV", "corners mV", "loss W", "junction °C")
    for head in heads:
        table.add_column(head, justify="right", no_wrap=True)
    for r in p.drop:
        table.add_row(
            f"{r.current_A:g}",
            f"{1e3 * r.nominal_V:.1f}",
            f"{1e3 * r.low_V:.1f} to {1e3 * r.high_V:.1f}",
            f"{1e3 * r.corner_low_V:.1f} to {1e3 * r.corner_high_V:.1f}",
            f"{r.loss_W:.3f}",
            f"{r.junction_C:.1f}",
        )
    print_table(console, table)
    for line in _summary(p):
        console.print(line, markup=False)
    print_table(console, _scenario_table(p.scenarios), TABLE_WIDTH)
    if not all(s.required for s in p.scenarios):
        console.print("* not asked of this stage (stage.must_stand)", markup=False)
    for scenario in p.scenarios:
        if scenario.notes:
            console.print(f"{scenario.name}:", style="bold", markup=False)
        for note in scenario.notes:
            console.print(f"  {note}", markup=False)
    for note in p.notes:
        console.print(f"note: {note}", markup=False)


def _summary(p: Prediction) -> list[str]:
    lines = []
    if p.runs_away:
        lines.append("hottest enclosure, highest current: RUNS AWAY")
    else:
        lines.append(
            f"hottest enclosure, highest current: case {p.case_C:.0f} °C, junction "
            f"{p.junction_C:.0f} °C (97.5 % of boards are cooler)"
        )
    if p.lowest_useful_supply_V is not None:
        lines.append(
            f"lowest useful supply voltage: {p.lowest_useful_supply_V:.1f} V "
            "for every board within tolerance (below it the drop grows by half)"
        )
    if p.highest_gate_supply_V is not None:
        stands = p.highest_gate_supply_V
        lines.append(
            f"highest supply voltage for the gate: {stands:.1f} V"
            if math.isfinite(stands)
            else "the gate stands twice the stage's highest supply voltage and more"
        )
    if p.fuse is not None:
        lines.append(_fuse(p.fuse, p.fuse_scenario))
    return lines


def _fuse(fuse: Coordination, scenario: str | None) -> str:
    word = f"{'coordinated' if fuse.coordinated else 'NOT COORDINATED'} ({scenario})"
    if not math.isfinite(fuse.clears_in_s):
        return f"fuse: {word}; not sure to open at {fuse.current_A:.3g} A"
    clamp = "" if fuse.clamp_A2s is None else f" of {fuse.clamp_A2s:.3g} A²s that the clamp stands"
    return (
        f"fuse: {word}; clears within {lasting(fuse.clears_in_s)}, lets through up to "
        f"{fuse.let_through_A2s:.3g} A²s{clamp}"
    )


def _scenario_table(scenarios: list[Scenario]) -> Table:
    table = Table(box=None, padding=(0, 1), header_style="bold")
    table.add_column("scenario", no_wrap=True)
    for head in ("exposed current", "guarded"):
        table.add_column(head, justify="right", no_wrap=True)
    table.add_column("stage", no_wrap=True)
    table.add_column("tightest", no_wrap=True)
    for s in scenarios:
        tightest = min(s.ratings, key=_share_left, default=None)
        table.add_row(
            s.name + ("" if s.required else " *"), spoken(s.exposed_current_A, "A"),
            spoken(s.guarded_V, "V"), _word(s), _rating(tightest),
        )  # fmt: skip
    return table


def _word(scenario: Scenario) -> str:
    if scenario.stands:
        return "stands"
    return "DOES NOT STAND" if scenario.required else "does not stand"


def _share_left(rating: Rating) -> float:
    return rating.margin / rating.limit


def _rating(rating: Rating | None) -> str:
    if rating is None:
        return ""
    if not math.isfinite(rating.value):
        return f"{rating.part} {rating.rating}: runs away"
    if rating.unit == "C":
        return f"{rating.part} {rating.rating} {rating.value:.0f} of {rating.limit:g} °C"
    unit = "A²s" if rating.unit == "A2s" else rating.unit
    return (
        f"{rating.part} {rating.rating} {spoken(rating.value, unit)} of "
        f"{spoken(rating.limit, unit)}"
    )


def _finite(value: object) -> object:
    """JSON has no infinity: None says that there is no figure."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value
