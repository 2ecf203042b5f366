"""Whether a board that was passed is one that should have been."""

from __future__ import annotations

from collections.abc import Iterator
from statistics import median

import numpy as np

from benchkit.evaluation.evaluate import Evaluation
from benchkit.records.record import Record
from tests.campaigns.faults_shop import stage_of
from tests.campaigns.faults_truth import Rows, Seen

GROSS = ("gate-open", "gate-shorted", "short")
"""Whatever the stage, and whatever its limits."""
BACKWARDS = "wrong-way-round"
"""A MOSFET carries the working current either way: only a trial in reverse shows it."""
GROSS_IN_SERIES = ("open", "fuse-blown", "fuse-missing")
"""Where the part, or the fuse, is in the way of the current."""
CLAMPS = ("clamp", "fused-clamp")
USED = ("sweep/", "soak", "supply/", "reverse/", "after/", "battery/", "clamp/", "fused/")
"""Steps whose readings are figures, by how they begin."""
LOOKED_AT = ("sweep/", "soak", "after/")
DROP_USED = ("sweep/", "soak", "supply/", "after/")
UNUSED = ("approach", "settling", "zero", "burst")
OFF_BY = {
    "drop": (0.01, 0.0005, 0.0008), "exposed_voltage": (0.002, 0.005, 0.0),
    "guarded_voltage": (0.002, 0.005, 0.0), "gate_voltage": (0.002, 0.005, 0.0),
    "exposed_current": (0.01, 0.002, 0.0), "case": (0.01, 1.5, 0.0), "ambient": (0.01, 1.5, 0.0),
}  # fmt: skip
"""A reading that is off by more was falsified: share, in its unit, and ohms for what fixture and
leads add."""
APERTURE_S = 0.06
"""A reading carries the time at which it began."""


def wrong_pass(seen: Seen, evaluation: Evaluation) -> list[str]:
    """Why this board should not have been passed; empty when it was not, or rightly so."""
    if evaluation.result.verdict != "pass" or seen.record is None:
        return []
    return [
        *_gross(seen), *_beyond_limits(seen, evaluation), *_not_reversed(seen.record, seen),
        *list(falsified(seen.record, seen))[:3],
    ]  # fmt: skip


def _gross(seen: Seen) -> Iterator[str]:
    series = stage_of(seen.trial.stage).file.stage.topology not in CLAMPS
    for fault in seen.trial.of("board"):
        in_the_way = series or fault.name.startswith("fuse")
        reversed_too = seen.record is not None and seen.record.stage.reverse is not None
        gross = (*GROSS, *((BACKWARDS,) if reversed_too or not series else ()))
        if fault.name in gross or (in_the_way and fault.name in GROSS_IN_SERIES):
            yield f"its part has the fault {fault.name}"


def _beyond_limits(seen: Seen, evaluation: Evaluation) -> Iterator[str]:
    """True values beyond their limit, each over the moments at which it was read."""
    record = seen.record
    assert record is not None
    limits = record.stage.limits
    for limit in limits.drop:
        at = [
            _true(seen.rows, "drop", seen.start_s + reading.time_s)
            for step, reading in record.readings
            if reading.point == "drop" and step.startswith("sweep/")
            and float(step.rsplit("/", 1)[1]) == limit.current_A
        ]  # fmt: skip
        if at and median(at) > limit.max_V:
            yield f"its true drop at {limit.current_A:g} A is {median(at):.4g} V"
    for steps, point, most in (
        ("reverse/dwell", "exposed_current", limits.leakage_max_A),
        ("reverse/dwell", "guarded_voltage", limits.guarded_reverse_max_V),
        ("battery/", "exposed_current", limits.battery_current_max_A),
    ):
        values = [
            -_true(seen.rows, point, seen.start_s + reading.time_s)
            for step, reading in record.readings
            if reading.point == point and step.startswith(steps)
            and (steps != "battery/" or step.endswith("/dwell"))
        ]  # fmt: skip
        if most is not None and values and median(values) > most:
            yield f"its true {point} in {steps} is {-median(values):.4g}, of {most:g} allowed"
    del evaluation


def _not_reversed(record: Record, seen: Seen) -> Iterator[str]:
    """A trial in reverse whose voltage never was the wrong way round is none."""
    reverse = record.stage.reverse
    if reverse is None or record.stage.stage.topology in CLAMPS:
        return
    full = record.stage.stage.supply_max_V if reverse.voltage_V is None else reverse.voltage_V
    lowest = min((float(v) for v in seen.rows["exposed_voltage"]), default=0.0)
    if lowest > -0.9 * full:
        yield f"its exposed port was never below {lowest:.3g} V, of -{full:g} V"


def falsified(record: Record, seen: Seen) -> Iterator[str]:
    """Readings that are used and were not what was there."""
    for step, reading in record.readings:
        if reading.point not in OFF_BY or not reading.usable or not step.startswith(USED):
            continue
        if any(word in step for word in UNUSED):
            continue
        if reading.point == "drop" and not step.startswith(DROP_USED):
            continue  # only held against the ports' voltages there
        if reading.point == "guarded_voltage" and step.startswith(LOOKED_AT):
            continue  # only the guard looks there, at its sign
        share, least, ohms = OFF_BY[reading.point]
        at = seen.start_s + reading.time_s
        low, high = _between(seen.rows, reading.point, at)
        amps = max(map(abs, _between(seen.rows, "exposed_current", at)))
        slack = share * max(abs(low), abs(high)) + least + ohms * amps + 4 * reading.u
        if not low - slack <= reading.value <= high + slack:
            yield (
                f"{reading.point} at {reading.time_s:.3f} s in {step} was read as "
                f"{reading.value:.5g} and was {low:.5g} to {high:.5g}"
            )


def _true(rows: Rows, point: str, at_s: float) -> float:
    return float(np.mean(_between(rows, point, at_s)))


def _between(rows: Rows, point: str, at_s: float) -> tuple[float, float]:
    """What a quantity went through while it was read."""
    first = max(int(np.searchsorted(rows["at_s"], at_s - 1e-6)) - 1, 0)
    end = int(np.searchsorted(rows["at_s"], at_s + APERTURE_S))
    found = rows[point][first : max(end, first + 1)]
    return float(np.min(found)), float(np.max(found))
