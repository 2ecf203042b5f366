"""What was truly so in a trial, held against what its run said."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchkit.files.guarding import Thresholds
from benchkit.guard import Envelope
from benchkit.guard.envelope import PROOF_V
from benchkit.records.record import Record
from tests.campaigns.faults_draw import Trial

Floats = NDArray[np.float64]
Rows = Mapping[str, Floats]

SHARE, VOLT, AMP, KELVIN, JOULE = 0.003, 0.02, 0.012, 1.2, 2.0
"""What read-backs and sensors of this bench may be off by: so far beyond its threshold a quantity
need not be seen."""
BLINDING = ("lost-answer", "garbage", "truncated", "dropped-peer", "refused-port", "queue-error")
WATCHED = ("supply", "battery", "thermometer")
"""Instruments that are asked at every look, while what they stand for is on."""
HOLDING = ("stuck-output", "lying-output")


RESIDUAL_V, OFF_A = Thresholds().residual_V, Thresholds().off_A


@dataclass
class Seen:
    """A trial as it went. steps: bench time at which each energised step began, and its envelope.

    start_s: bench time at which the run began. held: faults with the board's age from which each
    is active.
    """

    trial: Trial
    rows: Rows
    steps: list[tuple[float, Envelope]]
    start_s: float
    record: Record | None
    ages: dict[str, float]
    told_on: bool
    """It ended as NotConfirmedOff."""
    on_at_end: bool
    reactions: dict[str, float] = field(default_factory=dict)
    """How long it took, by what it was that should have ended it."""

    @property
    def on(self) -> NDArray[np.bool_]:
        """Whether anything was on, by row."""
        found: NDArray[np.bool_] = (self.rows["supply_on"] + self.rows["battery_on"]) > 0
        return found

    @property
    def held(self) -> bool:
        """Whether a fault kept an output on, whatever was sent."""
        return any(fault.family in HOLDING for fault in self.trial.faults)


def false_off(seen: Seen) -> list[str]:
    """Where the record says that off was confirmed and something was on."""
    if seen.record is None:
        return []
    at, on, told = seen.rows["at_s"], seen.on & _alive(seen.rows), []
    for event in seen.record.events:
        if event["kind"] == "off" and event.get("time_s") is not None:
            row = int(np.searchsorted(at, seen.start_s + float(str(event["time_s"])) + 1e-6)) - 1
            if row >= 0 and on[row]:
                told.append(f"at {event['time_s']} s, {event['text']}")
    return told


def _alive(rows: Rows) -> NDArray[np.bool_]:
    """Where what is on can be told from what is off, by anything that measures at the terminals."""
    volts = np.maximum(np.abs(rows["exposed_voltage"]), np.abs(rows["guarded_voltage"]))
    found: NDArray[np.bool_] = (volts > RESIDUAL_V) | (np.abs(rows["exposed_current"]) > OFF_A)
    return found


def react(seen: Seen) -> None:
    """Fill in how long everything took that the guard should have ended."""
    at = seen.rows["at_s"]
    starts = [start for start, _ in seen.steps]
    for number, (start, envelope) in enumerate(seen.steps):
        until = starts[number + 1] if number + 1 < len(starts) else math.inf
        within = (at >= start) & (at < until) & seen.on
        if within.any():
            for what, beyond in _beyond(seen.rows, envelope, within):
                _note(seen, what, within & beyond)
    for what, active in _blinded(seen):
        _note(seen, what, active & seen.on)


def _beyond(
    rows: Rows, envelope: Envelope, within: NDArray[np.bool_]
) -> Iterator[tuple[str, NDArray[np.bool_]]]:
    """Every watched quantity, and where it is beyond its threshold."""
    drives = envelope.drives()
    at, power = rows["at_s"], np.zeros(len(rows["at_s"]))
    for source, drive in drives.items():
        volts, amps = np.abs(rows[f"{source}_voltage"]), np.abs(rows[f"{source}_current"])
        live = rows[f"{source}_on"] > 0
        yield f"{source}'s voltage", live & (volts > drive.over_voltage_V * (1 + SHARE) + VOLT)
        yield f"{source}'s current", live & (amps > drive.over_current_A * (1 + SHARE) + AMP)
        power = power + np.where(live, np.nan_to_num(volts * amps), 0.0)
    yield "case", rows["case"] > envelope.case_max_C + KELVIN
    if max(drive.voltage_V for drive in drives.values()) > PROOF_V:
        yield "guarded port", rows["guarded_voltage"] < envelope.guarded_min_V - VOLT
    began = at[within][0]
    yield "time", at - began > envelope.longest_s
    energy = np.cumsum(np.where(within, power, 0.0) * np.diff(at, prepend=at[0]))
    yield "energy", energy > envelope.energy_max_J * (1 + SHARE) + JOULE


def _blinded(seen: Seen) -> Iterator[tuple[str, NDArray[np.bool_]]]:
    """Every fault that must end what is energised, and where it is active."""
    age = seen.rows["age_s"]
    for fault in seen.trial.faults:
        since = seen.ages.get(fault.name)
        if since is None:
            continue
        active: NDArray[np.bool_] = age >= since
        family, _, of = fault.name.partition(":")
        if fault.name in ("loop-open", "sensor-open:case"):
            yield fault.name, active
        elif family in BLINDING and of in WATCHED and active.any():
            # One that strikes while nothing is on may be spent before anything is.
            first = int(np.argmax(active))
            own = seen.rows[f"{of}_on"] if of in ("supply", "battery") else seen.on
            if seen.on[first] and own[first] and seen.record is not None:
                yield fault.name, active & (np.cumsum(active & ~seen.on) == 0)


def _note(seen: Seen, what: str, where: NDArray[np.bool_]) -> None:
    """The longest that ``where`` lasts: bench time, and the wall's with it, in which instruments
    are waited for."""
    at, wall = seen.rows["at_s"], seen.rows["wall_s"]
    edges = np.flatnonzero(np.diff(np.concatenate([[0], where.astype(int), [0]])))
    for first, end in zip(edges[::2], edges[1::2], strict=True):
        last = min(int(end), len(at) - 1)
        took = float(at[last] - at[first] + wall[last] - wall[first])
        seen.reactions[what] = max(seen.reactions.get(what, 0.0), took)
