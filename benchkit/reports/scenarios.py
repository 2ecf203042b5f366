"""The section of a run's report that holds every scenario, predicted and found."""

from __future__ import annotations

import re

from benchkit.evaluation.evaluate import Evaluation
from benchkit.records.record import Record
from benchkit.reports.section import Section, Table

AGREES = {True: "yes", False: "NO", None: "–"}
KEY = (
    "Predicted: the datasheets' band for 95 % of parts under the conditions of the trial; where "
    "nothing was tried, the worst of tolerance, voltage and ambient. Found: measured, with U."
)


def scenarios_section(record: Record, evaluation: Evaluation) -> Section | None:
    """Always there: what was not tried is said too."""
    del record
    rows = [
        [
            str(one["scenario"]), str(one["what"]), _set(one["predicted"]), _set(one["found"]),
            AGREES[one["agrees"] if isinstance(one["agrees"], bool) else None],
        ]
        for one in evaluation.result.scenarios
    ]  # fmt: skip
    heads = ("Scenario", "What", "Predicted", "Found here", "Agree")
    return Section(
        "scenarios", "What was predicted, and what was found", [], "",
        [Table("", heads, rows, KEY, words=3)],
    )  # fmt: skip


def _set(text: object) -> str:
    """With minus signs instead of hyphens before numbers."""
    return re.sub(r"(?<![\w.])-(?=\d)", "−", str(text))
