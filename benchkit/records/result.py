"""The shape of ``result.json``: one row a measurand, as the contract spells it."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field
from typing import Literal

Verdict = Literal["pass", "fail", "undecided"]
SCHEMA = 1


@dataclass(frozen=True)
class BudgetLine:
    """One component of an uncertainty, in the measurand's unit."""

    name: str
    u: float
    distribution: str
    dof: float | None


@dataclass(frozen=True)
class Measurand:
    """One figure, what was promised, and what it must be."""

    name: str
    unit: str
    condition: str
    predicted: dict[str, float] | None
    """nominal, low, high; None where nothing is promised."""
    measured: float | None
    U: float | None
    k: float | None
    limit: dict[str, float | None]
    verdict: Verdict | None
    """None where there is no limit to judge against."""
    en: float | None
    conformity: float | None = None
    """Probability that the true value meets the limit."""
    budget: list[BudgetLine] = field(default_factory=list)
    remark: str = ""


@dataclass(frozen=True)
class Result:
    """What a run found."""

    serial: str
    stage: str
    topology: str
    verdict: Verdict
    why: list[str]
    measurands: list[Measurand]
    findings: list[str]
    not_tested: list[str]
    ratings: list[dict[str, object]] = field(default_factory=list)
    """Predicted, at the worst of tolerance and supply: scenario, part, rating, unit, value,
    limit, margin, holds."""
    scenarios: list[dict[str, object]] = field(default_factory=list)
    """What was predicted of a scenario beside what was found: scenario, what, predicted, found,
    agrees."""

    def document(self) -> dict[str, object]:
        """JSON-ready, with the contract's keys first."""
        return {
            "schema": SCHEMA,
            "serial": self.serial,
            "stage": self.stage,
            "verdict": self.verdict,
            "measurands": [asdict(m) for m in self.measurands],
            "topology": self.topology,
            "why": self.why,
            "findings": self.findings,
            "not_tested": self.not_tested,
            "ratings": self.ratings,
            "scenarios": self.scenarios,
        }
