"""Stages with a line or a part changed, their answers to one scenario, and how to read those."""

from __future__ import annotations

import re

from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.prediction.connections import surroundings
from benchkit.prediction.scenarios import Scenario, scenario
from benchkit.stage import Sample, Stage, build_stage
from tests.benchkit.nine_stages import text


def stage(topology: str, *changes: tuple[str, str], tables: str = "", **parts: str | None) -> Stage:
    """One of the nine with ``changes`` of its text, old and new, and ``parts`` replaced."""
    body = text(topology, "", tables, **parts)
    for old, new in changes:
        assert old in body
        body = body.replace(old, new)
    return build_stage(parse(StageFile, body, "stage.toml"), "stage.toml")


def answer(of: Stage, name: str, boards: Sample | None = None) -> Scenario:
    """Of a dozen boards with both corners among them, or of ``boards``."""
    return scenario(of, boards or of.draw(12, 4, corners=True), name, surroundings(of.file))


def broken(found: Scenario) -> list[tuple[str, str]]:
    """Part and name of each rating that does not hold."""
    return [(one.part, one.rating) for one in found.ratings if not one.holds]


def value(found: Scenario, part: str, name: str) -> float:
    """What a rating is compared with."""
    return next(r.value for r in found.ratings if (r.part, r.rating) == (part, name))


def says(found: Scenario, what: str) -> bool:
    """Whether some sentence matches a pattern."""
    return any(re.search(what, note) for note in found.notes)
