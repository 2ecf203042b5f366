"""What one part of a run adds to its result."""

from __future__ import annotations

from dataclasses import dataclass, field

from benchkit.evaluation.findings import Remark
from benchkit.records.result import Measurand


@dataclass(frozen=True)
class ScenarioFound:
    """One thing that was predicted of a scenario, beside what was found of it, both in words.

    agrees: None where the two were not found under the same conditions.
    """

    scenario: str
    what: str
    predicted: str
    found: str
    agrees: bool | None = None


@dataclass(frozen=True)
class Part:
    """rows: its figures. remarks: what they mean. untested: what a signature does not cover.
    detail: what its section of the report draws, by the type of which the section knows it."""

    rows: tuple[Measurand, ...]
    remarks: tuple[Remark, ...] = ()
    untested: tuple[str, ...] = ()
    scenarios: tuple[ScenarioFound, ...] = ()
    detail: object = field(default=None)
