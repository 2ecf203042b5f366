"""Uncertainty budgets as tables."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from benchkit.records.result import BudgetLine, Measurand
from benchkit.reports.words import degrees, named, plain, scaled

LEAST_SHARE = 0.001
"""Components with a smaller share of the variance are counted together."""
COLUMNS = 8
SHAPES = {"normal": "normal", "rectangular": "even between limits"}


@dataclass(frozen=True)
class BudgetRow:
    """One component."""

    name: str
    u: str
    share: float
    shape: str
    dof: str


@dataclass(frozen=True)
class BudgetTable:
    """One measurand's budget."""

    title: str
    unit: str
    rows: list[BudgetRow]
    combined: str
    k: str
    U: str


@dataclass(frozen=True)
class DropTable:
    """Budgets of drops at several currents, one column each."""

    unit: str
    heads: list[str]
    rows: list[tuple[str, list[str]]]
    combined: list[str]
    U: list[str]


def budget_tables(rows: Sequence[Measurand]) -> list[BudgetTable]:
    """Budgets of everything judged, and of every figure that is not a drop."""
    return [
        _table(row) for row in rows
        if row.budget and row.U is not None and (row.verdict is not None or row.name != "drop")
    ]  # fmt: skip


def _table(row: Measurand) -> BudgetTable:
    combined = math.hypot(*(line.u for line in row.budget))
    factor, unit = scaled(row.unit, combined)
    shown: list[tuple[BudgetLine, float]] = []
    small: list[tuple[BudgetLine, float]] = []
    for line in row.budget:
        share = (line.u / combined) ** 2 if combined else 0.0
        (shown if share >= LEAST_SHARE else small).append((line, share))
    rows = [
        BudgetRow(
            degrees(line.name), plain(factor * abs(line.u)), 100 * share,
            SHAPES.get(line.distribution, line.distribution),
            "∞" if line.dof is None else f"{line.dof:.0f}",
        )
        for line, share in shown
    ]  # fmt: skip
    if small:
        rest = math.hypot(*(line.u for line, _ in small))
        what = "one smaller source" if len(small) == 1 else f"{len(small)} smaller sources together"
        rows.append(BudgetRow(what, plain(factor * rest), sum(100 * s for _, s in small), "", ""))
    return BudgetTable(
        f"{named(row.name)}, {degrees(row.condition)}", unit, rows, plain(factor * combined),
        f"{row.k:.2f}" if row.k is not None else "", plain(factor * (row.U or 0.0)),
    )  # fmt: skip


def drop_tables(rows: Sequence[Measurand]) -> list[DropTable]:
    """Budgets of all drops: sources down, currents across, as many tables as it takes."""
    drops = [row for row in rows if row.name == "drop" and row.budget and row.U is not None]
    return [_drops(drops[k : k + COLUMNS]) for k in range(0, len(drops), COLUMNS)]


def _drops(drops: Sequence[Measurand]) -> DropTable:
    combined = [math.hypot(*(line.u for line in row.budget)) for row in drops]
    factor, unit = 1e6, "µV"
    parts = [{line.name: abs(line.u) for line in row.budget} for row in drops]
    names = sorted(
        {name for part in parts for name in part},
        key=lambda name: (-max(part.get(name, 0.0) for part in parts), name),
    )
    return DropTable(
        unit, [row.condition.partition(",")[0] for row in drops],
        [
            (name, [_cell(factor * part[name]) if name in part else "–" for part in parts])
            for name in names
        ],
        [plain(factor * u) for u in combined], [plain(factor * (row.U or 0.0)) for row in drops],
    )  # fmt: skip


def _cell(microvolts: float) -> str:
    return plain(microvolts, 2) if microvolts >= 0.001 else "< 0.001"
