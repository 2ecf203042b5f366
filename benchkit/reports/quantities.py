"""The figures of a lot gathered by what was measured, with their statistics in words."""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass

from benchkit.evaluation.verdict import rounded
from benchkit.lots import LotStatistics, generalised_esd, summarise
from benchkit.metrology import Limit
from benchkit.records.result import Measurand
from benchkit.reports.words import NONE, degrees, named, plain, rescaled, shown_in, unit_of

FEWEST = 5
"""Among fewer boards none is said to stand out: two that chance to be close would damn a third."""
UNLIKELY = 0.01
"""A probability below this is worth a remark: a lot has many figures, and chance has its share."""


@dataclass(frozen=True)
class Quantity:
    """One figure of every board: ``rows`` in the order of the boards, None where it is missing.

    All of it is in ``unit``, which is the record's or a smaller one. ``statistics`` speak of the
    boards that are not ``left_out``.
    """

    name: str
    condition: str
    unit: str
    factor: float
    """From the record's unit to this one."""
    rows: list[Measurand | None]
    statistics: LotStatistics
    odd: frozenset[int]
    """Places of the boards that stand out from the others in this figure."""
    left_out: frozenset[int]
    """Places of the boards that stand out or fail, whether or not they have a value."""
    low: float | None
    high: float | None

    @property
    def title(self) -> str:
        """Name and condition."""
        return ", ".join(filter(None, [named(self.name), degrees(self.condition)]))

    @property
    def judged(self) -> bool:
        """Whether there is a limit."""
        return self.low is not None or self.high is not None

    @property
    def values(self) -> list[float]:
        """Measured, nan where it is missing."""
        return [math.nan if r is None or r.measured is None else r.measured for r in self.rows]


def quantities_of(
    boards: Sequence[Sequence[Measurand]], failed: Collection[int] = ()
) -> list[Quantity]:
    """Gather the rows of all boards, in the order in which they first occur.

    failed: places of the boards whose verdict is fail; no statistics are made of them.
    """
    found: dict[tuple[str, str, str], list[Measurand | None]] = {}
    for number, rows in enumerate(boards):
        for row in rows:
            key = (row.name, same_condition(row.condition), row.unit)
            found.setdefault(key, [None] * len(boards))[number] = row
    # A board that was stopped lists fewer currents: its order must not scatter the others'.
    order = sorted(found, key=lambda key: (_rank(found, key[0]), _leading(key[1])))
    return [_quantity(key, found[key], frozenset(failed)) for key in order]


def same_condition(condition: str) -> str:
    """A condition without what was itself measured, so that boards can be compared."""
    parts = condition.split(", ")
    own = ("case at ", "below ")
    return ", ".join(p for p in parts if not p.startswith(own) and not p.endswith(" W"))


def _rank(found: dict[tuple[str, str, str], list[Measurand | None]], name: str) -> int:
    return list(dict.fromkeys(key[0] for key in found)).index(name)


def _leading(condition: str) -> float:
    first = condition.partition(" ")[0]
    try:
        return float(first)
    except ValueError:
        return math.inf


def _quantity(
    key: tuple[str, str, str], found: list[Measurand | None], failed: frozenset[int]
) -> Quantity:
    name, condition, unit = key
    factor, unit = shown_in(unit, found)
    rows = [None if row is None else rescaled(row, factor, unit) for row in found]
    limits = [row.limit for row in rows if row is not None]
    low = next((limit["low"] for limit in limits if limit["low"] is not None), None)
    high = next((limit["high"] for limit in limits if limit["high"] is not None), None)
    measured = {
        k: r.measured for k, r in enumerate(rows) if r is not None and r.measured is not None
    }
    sound = [k for k in measured if k not in failed]
    found_odd = generalised_esd([measured[k] for k in sound]) if len(sound) >= FEWEST else []
    odd = {sound[k] for k in found_odd}
    kept = [k for k in sound if k not in odd]
    # Failed boards would hide each other from the test: each is held against the others alone.
    odd |= {
        k for k in measured
        if k in failed
        and len(kept) >= FEWEST
        and generalised_esd([*(measured[j] for j in kept), measured[k]], most=1) == [len(kept)]
    }  # fmt: skip
    spreads = [math.nan if (row := rows[k]) is None or row.U is None else row.U for k in kept]
    limit = Limit(low, high) if low is not None or high is not None else None
    return Quantity(
        name, condition, unit, factor, rows,
        summarise([measured[k] for k in kept], limit, U=spreads),
        frozenset(odd), frozenset(odd) | failed, low, high,
    )  # fmt: skip


@dataclass(frozen=True)
class Line:
    """One row of the statistics' table."""

    title: str
    unit: str
    n: str
    mean: str
    sd: str
    extremes: str
    interval: str
    limit: str
    ppk: str
    normality: str
    trend: str


def line_of(quantity: Quantity) -> Line:
    """Spell a lot's statistics, to the decimal place that two digits of the spread allow.

    Mean and standard deviation get one digit more: further figures are worked out from them.
    """
    s = quantity.statistics
    sd = s.sd if s.sd else None

    def spell(value: float | None) -> str:
        return NONE if value is None else rounded(value, sd)[0]

    interval = NONE
    if s.tolerance_two_sided is not None:
        interval = " to ".join(spell(bound) for bound in s.tolerance_two_sided)
    ppk = NONE if s.ppk is None else f"{s.ppk:.2f}"
    if s.ppk_low is not None and s.ppk_high is not None:
        ppk += f" ({s.ppk_low:.2f} to {s.ppk_high:.2f})"
    bounds = [f"≥ {quantity.low:.6g}"] if quantity.low is not None else []
    bounds += [f"≤ {quantity.high:.6g}"] if quantity.high is not None else []
    return Line(
        quantity.title, unit_of(quantity.unit), f"{s.n} of {len(quantity.rows)}",
        NONE if s.mean is None else rounded(s.mean, None if sd is None else 0.1 * sd)[0],
        NONE if s.sd is None else plain(s.sd),
        NONE if s.minimum is None or s.n < 2 else f"{spell(s.minimum)} to {spell(s.maximum)}",
        interval, " and ".join(bounds) or NONE, ppk, _probability(s.normality_p),
        NONE if s.trend is None else f"{s.trend:+.2f} ({_probability(s.trend_p)})",
    )  # fmt: skip


def _probability(p: float | None) -> str:
    if p is None:
        return NONE
    return "< 0.001" if p < 0.001 else f"{p:.3f}"


def remarks_on(quantities: Sequence[Quantity]) -> list[str]:
    """What the statistics mean, and what they cannot say, each sentence once."""
    told: dict[str, list[str]] = {}
    for quantity in quantities:
        for text in _remarks(quantity):
            told.setdefault(text, []).append(quantity.title)
    every = len(quantities)
    return [
        f"{_whom(titles, every)}: {text}" for text, titles in told.items()
    ]  # fmt: skip


def _whom(titles: Sequence[str], every: int) -> str:
    if len(titles) == every and every > 1:
        return "Every figure"
    if len(titles) > 3:
        return f"{'; '.join(titles[:2])} and {len(titles) - 2} more"
    return "; ".join(titles)


def _remarks(quantity: Quantity) -> list[str]:
    s = quantity.statistics
    told = []
    silent = sum(
        1 for k, row in enumerate(quantity.rows)
        if k not in quantity.left_out and (row is None or row.measured is None)
    )  # fmt: skip
    if silent:
        told.append(f"{silent} of {len(quantity.rows)} boards gave no value")
    if s.trend is not None and s.trend_p is not None and s.trend_p < UNLIKELY:
        way = "rises" if s.trend > 0 else "falls"
        told.append(
            f"{way} from board to board more steadily than chance would; suspect a bench that "
            "drifts before a lot that does"
        )
    if s.normality_p is not None and s.normality_p < UNLIKELY:
        told.append(
            "the boards counted do not look like one normal lot, so tolerance interval "
            "and capability are not to be leaned on"
        )
    if s.ppk is not None and s.ppk_low is None:
        told.append("a capability from fewer than ten boards has no interval: it is a rough figure")
    if s.mean_U is not None and s.sd and s.mean_U > 2 * s.sd and math.isfinite(s.mean_U):
        told.append(
            "the boards differ by less than one board's own uncertainty, which is mostly common "
            "to all: the spread says how alike they are, not how right the mean is"
        )
    return [*told, *s.notes]


def left_out_of(
    quantities: Sequence[Quantity], serials: Sequence[str], failed: Sequence[int]
) -> str:
    """Which boards the statistics do not hold, and why, so that nobody takes them for the lot's."""
    whose: dict[int, list[str]] = {}
    for quantity in quantities:
        for k in sorted(quantity.odd - set(failed)):
            whose.setdefault(k, []).append(quantity.title)
    told = []
    if failed:
        names = ", ".join(serials[k] for k in failed)
        verb = "its verdict is fail" if len(failed) == 1 else "their verdict is fail"
        told.append(f"{names} everywhere, because {verb}")
    for k in sorted(whose):
        titles = whose[k]
        where = (
            " and ".join(titles)
            if len(titles) < 3
            else f"{len(titles)} of the {len(quantities)} figures"
        )
        told.append(f"{serials[k]} from {where}, because it stands out there")
    if not told:
        return "No board fails or stands out: every board that gave a value is counted."
    return (
        "These numbers are not the whole lot's: they speak of the boards that neither fail nor "
        f"stand out. Left out: {'; '.join(told)}."
    )
