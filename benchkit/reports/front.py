"""What stands on the one page that is signed: as many rows and sentences as it holds."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from benchkit.records.result import Measurand

PAGE_MM = 268.0
"""What A4 leaves between the margins of page.css."""
FIXED_MM = 26.0 + 14.0 + 16.0 + 18.0
"""Head with facts, table head, its key, signatures."""
WIDE = 38
"""Letters that fit on a line of a condition or a remark."""
MOST_REASONS = 5
MOST_REMARKS = 3


@dataclass(frozen=True)
class Front:
    """What is shown first, and what has to go behind."""

    rows: list[Measurand]
    reasons: list[str]
    remarks: list[str]
    reasons_behind: list[str]
    remarks_behind: list[str]


def front_page(
    rows: Sequence[Measurand], reasons: Sequence[str], remarks: Sequence[str], notes: int,
    not_tested: Sequence[str],
) -> Front:  # fmt: skip
    """Choose the rows that a signature leans on most, until the page is full.

    notes: how many further boxes stand above the table. Heights are estimates on the safe side,
    for letters of the size in page.css.
    """
    first, second = reasons[:MOST_REASONS], remarks[:MOST_REMARKS]
    taken = FIXED_MM + max(30.0, 17.0 + 4.6 * _lines(first, 90)) + 11.0 * notes
    taken += 10.0 + 4.6 * _lines(second, 115) if second else 0.0
    taken += 13.0 + 4.6 * math.ceil(_lines(not_tested, 55) / 2 + 0.5)
    before = [
        sum(row.name == rows[k].name and row.verdict is not None for row in rows[:k])
        for k in range(len(rows))
    ]
    order = sorted(range(len(rows)), key=lambda k: _weight(rows[k], before[k], k))
    kept: list[int] = []
    groups: set[str] = set()
    for k in order:
        height = _height(rows[k]) + (0.0 if rows[k].name in groups else 6.5)
        if taken + height > PAGE_MM:
            break
        taken += height
        kept.append(k)
        groups.add(rows[k].name)
    return Front(
        [rows[k] for k in sorted(kept)], list(first), list(second), list(reasons[MOST_REASONS:]),
        list(remarks[MOST_REMARKS:]),
    )  # fmt: skip


def _weight(row: Measurand, before: int, place: int) -> tuple[int, int, int]:
    """Missed and undecided limits first; of the limits that are met, every quantity before a
    second row of any (``before``: how many of its name stand above it); of the drops that nothing
    is asked of, the largest."""
    if row.verdict is not None:
        grave = ("fail", "undecided", "pass").index(row.verdict)
        return grave, before if row.verdict == "pass" else 0, place
    if row.name != "drop":
        return 3, 0, place
    return (4 if (row.en or 0.0) > 1 else 5), 0, -place


def _height(row: Measurand) -> float:
    certain = row.conformity is None or not 0.001 <= row.conformity <= 0.999
    lines = 1 if len(row.condition) < WIDE else 2
    if row.remark and row.measured is not None:
        lines += 1 if len(row.remark) < WIDE else 2
    return 2.2 + 3.7 * max(lines, 1 if certain else 2)


def _lines(texts: Sequence[str], width: int) -> int:
    return sum(max(1, math.ceil(len(text) / width)) for text in texts)
