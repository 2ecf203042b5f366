"""One measurand's row, and the verdict of the whole run in words."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from benchkit.evaluation.findings import Remark
from benchkit.metrology import Budget, Limit, Rule, judge, normalised_error, overall
from benchkit.records.result import BudgetLine, Measurand, Verdict

SPELLED = {
    "reverse_leakage": "leakage in reverse",
    "reverse_guarded": "the guarded port below zero",
    "on_from": "the supply voltage from which it is on",
    "useful_from": "the supply voltage from which the drop keeps its limit",
    "supply_drop": "drop",
    "battery_current": "the battery's current",
    "battery_guarded": "the guarded port with a battery at the exposed one",
    "clamp_drop": "the clamp's drop",
    "clamp_peak": "the guarded port below zero while the fuse opened",
    "fuse_clears": "the time until the fuse had cleared",
    "fuse_let_through": "the I2t that the fuse let through",
}
"""Measurands whose name is not yet what they are called in a sentence."""


@dataclass(frozen=True)
class Promise:
    """What the datasheets promise: the typical value and the band that holds 95 % of parts."""

    nominal: float
    low: float
    high: float


def judged(
    name: str,
    unit: str,
    condition: str,
    measured: float,
    budget: Budget,
    promise: Promise | None,
    low: float | None,
    high: float | None,
    rule: Rule,
    remark: str = "",
) -> Measurand:
    """A measured figure with its uncertainty, compared with promise and limit."""
    expanded = budget.expanded()
    verdict: Verdict | None = None
    conformity: float | None = None
    if low is not None or high is not None:
        decision = judge(measured, expanded, Limit(low, high), rule)
        verdict, conformity = decision.verdict, _finite(decision.conformity_probability)
    en = None
    if promise is not None and math.isfinite(measured) and math.isfinite(expanded.U):
        half = 0.5 * (promise.high - promise.low)
        en = normalised_error(measured, expanded.U, promise.nominal, half)
    return Measurand(
        name,
        unit,
        condition,
        vars(promise) if promise else None,
        _finite(measured),
        _finite(expanded.U),
        _finite(expanded.k),
        {"low": low, "high": high},
        verdict,
        en,
        conformity,
        [
            BudgetLine(c.name, c.u, c.distribution, _finite(c.dof))
            for c in sorted(budget.components, key=lambda c: -abs(c.u))
            if math.isfinite(c.u)
        ],
        remark,
    )


def missing(
    name: str, unit: str, condition: str, low: float | None, high: float | None, why: str
) -> Measurand:
    """A limit that nothing was measured for: undecided, never passed."""
    return Measurand(
        name,
        unit,
        condition,
        None,
        None,
        None,
        None,
        {"low": low, "high": high},
        "undecided",
        None,
        remark=f"not measured: {why}",
    )


def summary(
    measurands: Sequence[Measurand], remarks: Sequence[Remark], stopped: Sequence[str]
) -> tuple[Verdict, list[str]]:
    """The run's verdict and the sentences that give its reason, the gravest first."""
    verdicts: list[Verdict] = [m.verdict for m in measurands if m.verdict is not None]
    why = [f"the run was stopped: {text}" for text in stopped]
    if stopped:
        verdicts.append("undecided")
    for remark in remarks:
        if remark.weight != "note":
            verdicts.append("fail" if remark.weight == "fault" else "undecided")
            why.append(remark.text)
    for m in sorted(measurands, key=lambda m: {"fail": 0, "undecided": 1}.get(m.verdict or "", 2)):
        if m.verdict in ("fail", "undecided"):
            why.append(_reason(m))
    if not any(m.verdict for m in measurands):
        verdicts.append("undecided")
        why.append("the stage file sets no limits, so there is nothing to pass")
    verdict = overall(verdicts)
    if verdict == "pass":
        tightest = min((m for m in measurands if m.verdict == "pass"), key=_headroom)
        why.append(
            f"every limit is met, each by more than its uncertainty; the tightest is "
            f"{_spell(tightest)}"
        )
    else:
        why += [remark.text for remark in remarks if remark.weight == "note"]
    return verdict, why


def _reason(m: Measurand) -> str:
    if m.measured is None:
        why = m.remark or "no figure could be given"
        return f"{_name(m)} at {m.condition} is undecided: {why}"
    side = "misses" if m.verdict == "fail" else "is too close to"
    return f"{_spell(m)}: it {side} its limit"


def _spell(m: Measurand) -> str:
    factor, unit = (1e3, "mA") if m.unit == "A" else (1.0, m.unit)
    low, high = (None if v is None else factor * v for v in (m.limit["low"], m.limit["high"]))
    bounds = " and ".join(
        part
        for part in (
            f"at least {low:.4g}" if low is not None else "",
            f"at most {high:.4g}" if high is not None else "",
        )
        if part
    )
    value, spread = rounded(*(None if v is None else factor * v for v in (m.measured, m.U)))
    return f"{_name(m)} at {m.condition}, {value} ± {spread} {unit} (limit {bounds} {unit})"


def _name(m: Measurand) -> str:
    return SPELLED.get(m.name) or m.name.replace("_", " ")


def rounded(value: float | None, U: float | None) -> tuple[str, str]:
    """A figure and its U, both to the decimal place of two significant digits of U."""
    if value is None or not math.isfinite(value):
        return "none", "none"
    if U is None or not math.isfinite(U) or U <= 0:
        return f"{value:.5g}", "none"
    places = 1 - math.floor(math.log10(U))
    if places < 0:
        return f"{round(value, places):.0f}", f"{math.ceil(U):d}"
    return f"{value:.{places}f}", f"{math.ceil(U * 10**places - 1e-9) / 10**places:.{places}f}"


def _headroom(m: Measurand) -> float:
    """Distance to the nearest limit in units of U."""
    if m.measured is None or not m.U:
        return math.inf
    gaps = [
        gap
        for gap in (
            None if m.limit["high"] is None else m.limit["high"] - m.measured,
            None if m.limit["low"] is None else m.measured - m.limit["low"],
        )
        if gap is not None
    ]
    return min(gaps) / m.U


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None
