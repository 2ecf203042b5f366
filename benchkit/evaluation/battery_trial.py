"""The battery trial, taken apart: what each state let through, and where it left the guarded
port."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from benchkit.evaluation.battery_trial_circuits import BACK, FLAT, ORDER
from benchkit.evaluation.sources import accuracy_of, gain, rectangular
from benchkit.evaluation.sweep import ZERO_LIMITS, temperatures
from benchkit.files.bench import PointName
from benchkit.metrology import Budget, Component
from benchkit.reading import Reading
from benchkit.records.record import Record

TAIL = 4
"""A dwell is judged by its last so many readings."""
UNKNOWN_DRIFT = 0.25
"""Drift of a zero that was taken once only, as a share of the declared offset (common practice, no
source)."""
DWELT = 0.8
"""A dwell counts as kept from this share of it on, less two looks."""
CONDUCTED, SKIPPED, BACK_HOME = "battery-conducts", "battery-skipped", "leads put back"


@dataclass(frozen=True)
class Figure:
    """A value with where its uncertainty comes from. worst: the single reading furthest the bad
    way, of ``looks`` readings."""

    value: float
    budget: Budget
    worst: float
    looks: int


@dataclass(frozen=True)
class Standing:
    """One state at one voltage of the stand-in.

    current: out of the battery, of a flat one into it, in A. guarded: plus against minus, in V.
    proof: read at the proof of polarity only, because the stage conducted there.
    """

    volts: float
    case_C: float
    current: Figure
    guarded: Figure
    proof: bool = False


@dataclass(frozen=True)
class State:
    """standings: rising in voltage, one for all states but a flat battery. trips: what the guard
    said when it ended the state. conducted: the run saw it conduct, and asked for no more. short:
    what is missing, in words; "" when it is whole."""

    name: str
    standings: tuple[Standing, ...]
    trips: tuple[str, ...]
    conducted: bool
    short: str


def read_states(record: Record) -> list[State]:
    """Every state that the stage file asks for, in the order in which they are done."""
    trial = record.stage.battery_trial
    asked = trial.scenarios if trial is not None else []
    return [_state(record, name) for name in ORDER if name in asked]


def _state(record: Record, name: str) -> State:
    events = list(_during(record, name))
    trips = tuple(str(e.get("text", "")) for e in events if e.get("kind") == "trip")
    conducted = any(e.get("kind") == CONDUCTED for e in events)
    steps = [s for s in record.steps(f"battery/{name}/") if _volts(s) is not None]
    standings = [found for step in steps if (found := _standing(record, name, step)) is not None]
    if not standings and conducted:
        proof = _proof(record, name, events)
        standings = [proof] if proof is not None else []
    skipped = [str(e.get("text", "")) for e in events if e.get("kind") == SKIPPED]
    if trips:
        short = "the guard ended it"
    elif not standings:
        short = "; ".join(["it was not done", *skipped])
    else:
        # Where the stage conducted no dwell is owed: there is nothing to wait for.
        short = "" if name == FLAT or conducted else _cut(record, name, standings[-1])
    return State(
        name, tuple(sorted(standings, key=lambda s: s.volts)), trips, conducted, short
    )  # fmt: skip


def _volts(step: str) -> float | None:
    try:
        return float(step.rpartition("/")[2])
    except ValueError:
        return None


def _during(record: Record, name: str) -> Iterator[dict[str, object]]:
    """The events from the moving of the state's leads on, until leads are moved again."""
    inside = False
    for event in record.events:
        if event.get("kind") == "step":
            text = str(event.get("text", ""))
            if text.startswith("battery/leads/"):
                inside = text == f"battery/leads/{name}"
            elif text == BACK_HOME:
                inside = False
        if inside:
            yield event


def _cut(record: Record, name: str, found: Standing) -> str:
    """That a state did not stay as long as it should have, if it did not."""
    trial = record.stage.battery_trial
    assert trial is not None
    times = [r.time_s for r in record.at(f"battery/{name}/dwell", "exposed_current")]
    times += [r.time_s for r in record.at(f"battery/{name}/{found.volts!r}", "case")]
    lasted = max(times) - min(times) if times else 0.0
    if lasted >= DWELT * trial.dwell_s - 2 * record.bench.bench.poll_s:
        return ""
    return f"it stayed for {lasted:.0f} s of {trial.dwell_s:g} s"


def _standing(record: Record, name: str, step: str) -> Standing | None:
    """None when current or guarded voltage was not read."""
    dwell = f"battery/{name}/dwell"
    every = {
        point: [*record.at(step, point), *record.at(dwell, point)]
        for point in ("exposed_current", "guarded_voltage")
    }
    if not all(every.values()):
        return None
    sign = 1 if name == BACK else -1
    last = every["exposed_current"][-1].time_s
    volts = _volts(step)
    assert volts is not None
    return Standing(
        volts, float(np.interp(last, *temperatures(record, "case"))),
        _figure(record, name, "exposed_current", every["exposed_current"], sign),
        _figure(record, name, "guarded_voltage", every["guarded_voltage"], 1),
    )  # fmt: skip


def _proof(record: Record, name: str, events: Sequence[dict[str, object]]) -> Standing | None:
    """What was read at the volt that proves polarity, while the leads were as for this state."""
    times = [float(str(e["time_s"])) for e in events if e.get("time_s") is not None]
    inside = (min(times, default=math.nan), max(times, default=math.nan))
    read = {
        point: [
            r for r in record.at("polarity/reversed", point) if inside[0] <= r.time_s <= inside[1]
        ]
        for point in ("exposed_current", "guarded_voltage")
    }
    if not all(read.values()):
        return None
    # What is read after the one that limits belongs to the other source's proof.
    current = read["exposed_current"][:1]
    near = min(read["guarded_voltage"], key=lambda r: abs(r.time_s - current[0].time_s))
    return Standing(
        1.0, float(np.interp(current[0].time_s, *temperatures(record, "case"))),
        _figure(record, name, "exposed_current", current, -1),
        _figure(record, name, "guarded_voltage", [near], 1), proof=True,
    )  # fmt: skip


def _figure(
    record: Record, name: str, point: PointName, readings: list[Reading], sign: int
) -> Figure:
    """The mean of the last readings on the largest range, the state's own zero taken off."""
    bench, table = record.bench, record.bench.points[point]
    range_V = max(r.range for r in readings)
    values = np.array([sign * r.value for r in readings if r.range == range_V])
    zeros = [r for r in record.at(f"zero/battery/{name}", point) if r.range == range_V]
    limit = accuracy_of(bench, point, range_V).offset_limit() / (table.shunt_ohm or 1.0)
    resting = np.array([sign * r.value for r in zeros])
    zeroed = resting.size > 1 and abs(float(resting.mean())) <= ZERO_LIMITS * limit
    zero = float(resting.mean()) if zeroed else 0.0
    tail = values[-TAIL:]
    # The current's or the port's own scatter counts as noise of its reading.
    squares = float(((tail - tail.mean()) ** 2).sum())
    dof = tail.size - 1
    if zeroed:
        squares += float(((resting - resting.mean()) ** 2).sum())
        dof += resting.size - 1
    noise = math.sqrt(squares / dof) if dof else 0.0
    dof = max(dof, 1)
    value = float(tail.mean()) - zero
    components = [
        gain(bench, point, range_V, value),
        rectangular("shunt tolerance", value * table.shunt_tolerance_percent / 100),
        Component(f"noise of a reading of {point}", noise / math.sqrt(tail.size), dof=dof),
    ]
    if zeroed:
        components += [
            Component(f"zero of {point}", noise / math.sqrt(resting.size), dof=dof),
            rectangular(f"drift of the zero of {point}", UNKNOWN_DRIFT * limit),
        ]
    else:
        components.append(rectangular(f"offset of {point}, not zeroed", limit))
    worst = float(values.max() if point == "exposed_current" else values.min()) - zero
    return Figure(value, Budget(c for c in components if c.u != 0.0), worst, values.size)
