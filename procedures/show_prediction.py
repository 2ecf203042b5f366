"""`predict`: what the datasheets promise, on the terminal or as JSON."""

from __future__ import annotations

import json
import math
import sys
from pathlib import Path

from rich.console import Console
from rich.table import Table

from benchkit.files import StageFile, load
from benchkit.prediction.predict import Prediction, predict
from benchkit.prediction.scenarios import Scenario
from benchkit.stage import build_stage
from procedures.tell import print_table


def show_prediction(path: Path, *, as_json: bool) -> int:
    """Print the prediction of a stage file."""
    prediction = predict(build_stage(load(StageFile, path), str(path)))
    if as_json:
        document = prediction.document()
        json.dump(_finite(document), sys.stdout, indent=1, ensure_ascii=False, allow_nan=False)
        sys.stdout.write("\n")
        return 0
    _show(prediction)
    return 0


def _show(p: Prediction) -> None:
    console = Console(highlight=False)
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
    if p.runs_away:
        console.print("hottest enclosure, highest current: RUNS AWAY", style="bold", markup=False)
    else:
        console.print(
            f"hottest enclosure, highest current: case {p.case_C:.0f} °C, junction "
            f"{p.junction_C:.0f} °C (97.5 % of boards are cooler)",
            markup=False,
        )
    if p.lowest_useful_supply_V is not None:
        console.print(
            f"lowest useful supply voltage: {p.lowest_useful_supply_V:.1f} V "
            "for every board within tolerance (below it the drop grows by half)",
            markup=False,
        )
    for scenario in p.scenarios:
        _show_scenario(console, scenario)
    for note in p.notes:
        console.print(f"note: {note}", markup=False)


def _show_scenario(console: Console, scenario: Scenario) -> None:
    console.print(
        f"{scenario.name}: {scenario.exposed_current_A:.3g} A into the exposed port, guarded side "
        f"at {scenario.guarded_V:.4g} V",
        style="bold",
        markup=False,
    )
    for r in scenario.ratings:
        state = "holds" if r.holds else "DOES NOT HOLD"
        console.print(
            f"  {r.part} {r.rating}: {_plain(r.value)} of {r.limit:.4g} {_unit(r.unit)}, {state}",
            markup=False,
        )
    for note in scenario.notes:
        console.print(f"  {note}", markup=False)


def _plain(value: float) -> str:
    """Four digits; what is less than a millionth of a millionth is nothing."""
    return f"{value:.4g}" if abs(value) >= 1e-12 else "0"


def _unit(unit: str) -> str:
    return "°C" if unit == "C" else unit


def _finite(value: object) -> object:
    """JSON has no infinity: None says that there is no figure."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value
