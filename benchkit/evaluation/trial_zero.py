"""What a point reads with nothing on, taken once before a trial."""

from __future__ import annotations

import math

import numpy as np

from benchkit.evaluation.sources import accuracy_of
from benchkit.evaluation.sweep import ZERO_LIMITS, Zero
from benchkit.files.bench import PointName
from benchkit.records.record import Record

UNKNOWN_DRIFT = 0.25
"""Drift of a zero that was taken once only, as a share of the declared offset (common practice, no
source)."""


def zero_of(record: Record, step: str, point: PointName, used_in: str) -> Zero:
    """What a point read in ``step`` with nothing on, for the readings of steps below ``used_in``.

    It is taken once; how far it may have moved since is judged by the zeros of the sweep, where
    they were taken on its range.
    """
    own = record.at(step, point)
    if not own:
        return Zero(0.0, 0.0, math.inf, 0.0, 0.0, math.inf, used=False)
    values = np.array([r.value for r in own])
    range_V, dof = own[0].range, max(values.size - 1, 1)
    noise = float(values.std(ddof=1)) if values.size > 1 else 0.0
    scale = 1 / (record.bench.points[point].shunt_ohm or 1.0)
    limit = accuracy_of(record.bench, point, range_V).offset_limit() * scale
    others = [
        float(np.mean([r.value for r in zeros]))
        for when in ("before", "after")
        if (zeros := [r for r in record.at(f"zero/{when}", point) if r.range == range_V])
    ]
    average = float(values.mean())
    drift = 0.5 * float(np.ptp([average, *others])) if others else UNKNOWN_DRIFT * limit
    ranges = {r.range for r in record.at(used_in, point)} | {r.range for r in own}
    used = ranges == {range_V} and abs(average) <= ZERO_LIMITS * limit
    return Zero(average, noise / math.sqrt(values.size), dof, drift, noise, dof, used)
