"""The bench's side of the campaign ``kills``: a simulated bench that outlives the measuring
process, goes on in real time as a real one would, and has seen every message."""

from __future__ import annotations

import math
import re
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from types import TracebackType
from typing import Self

from benchkit.files import BenchFile, load
from benchkit.reading import Reading
from instruments.simulated.control import CONTROL
from instruments.simulated.core import Core
from instruments.simulated.plant import Plant
from instruments.simulated.scpi import Device
from instruments.simulated.server import Servers, build_devices
from instruments.simulated.supply import Output, Supply
from instruments.simulated.timebase import RealTime
from procedures.inputs import read_board
from tests.campaigns.kill_runner import REACHED_IN, REACHING_IN

OVERFLOW = 9.9e37
Given = tuple[str, float | None]
"""Point, and its value; None for an answer that is no number."""


@dataclass(frozen=True)
class Said:
    """One message, as it was answered."""

    device: str
    text: str
    answer: str | None
    on: bool
    """Whether the supply's output was on."""
    proving: bool
    """On at no more than the volt that proves polarity, with the leads crossed."""
    aside: bool
    """Whether the process was looking at the ports before hands reach in."""


@dataclass(frozen=True)
class Levels:
    """What a supply's output holds; None for a protection that is not armed."""

    voltage_V: float
    current_limit_A: float
    over_voltage_V: float | None
    over_current_A: float | None


PROOF = Levels(1.0, 0.05, 1.6, 0.05)
"""What crossed leads are looked for with, as the plan says: 1 V at 50 mA."""


class Witness:
    """The served bench and its account of what happened."""

    def __init__(self, bench_path: Path, speed: float) -> None:
        bench = self.bench = load(BenchFile, bench_path)
        simulated = bench.simulated
        assert simulated is not None
        assert simulated.stage is not None
        self._time = RealTime(speed)
        self.plant = Plant(bench, bench_path, self._time)
        self.plant.insert(simulated.serial, str(bench_path.parent / simulated.stage))
        core = Core(self.plant, simulated.seed, simulated.serial, self._time.elapse)
        devices = build_devices(bench, core)
        supply = devices["supply"]
        assert isinstance(supply, Supply)
        self._supply, self._lock = supply, core.lock
        self.switched_on: list[Levels] = []
        supply.apply = self._see(supply.apply)  # type: ignore[assignment, method-assign]
        self.log: list[Said] = []
        self.arrived: Callable[[], None] = lambda: None
        """Called when a message has come, before anything is done with it."""
        self._aside = False
        for device in devices.values():
            device.execute = self._hear(device, device.execute)  # type: ignore[assignment, method-assign]
        self._servers = Servers(core, devices, 0)
        self.ports = self._servers.ports

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._time.end()
        self._servers.close()

    @property
    def is_on(self) -> bool:
        """Whether the supply's output is on."""
        return self._supply.outputs[self._supply.wired].closed

    @property
    def crossed(self) -> bool:
        """Whether the supply's leads are crossed."""
        return self.plant.harness.crossed

    @property
    def state(self) -> str:
        """What is going on, for a tally."""
        if not self.log:
            return "before the first message"
        state = "off"
        if self.is_on:
            proof = self.levels().voltage_V <= PROOF.voltage_V
            state = "on, proof" if proof else "on, full"
        return f"{state}, leads crossed" if self.crossed else state

    def _see(self, apply: Callable[[Output], None]) -> Callable[[Output], None]:
        def applied(output: Output) -> None:
            before = self.is_on
            apply(output)
            if self.is_on and not before:
                self.switched_on.append(self.levels())

        return applied

    def _hear(
        self, device: Device, execute: Callable[[str], str | None]
    ) -> Callable[[str], str | None]:
        def heard(text: str) -> str | None:
            self.arrived()
            if device.name == CONTROL and text.startswith((REACHING_IN, REACHED_IN)):
                self._aside = text.startswith(REACHING_IN)
            on = self.is_on
            proving = on and self.crossed and self.levels().voltage_V <= PROOF.voltage_V
            answer = execute(text)
            self.log.append(Said(device.name, text, answer, on, proving, self._aside))
            return answer

        return heard

    def levels(self) -> Levels:
        """What the wired output holds now."""
        supply, output = self._supply, self._supply.outputs[self._supply.wired]
        over_A = output.current if supply.trips_at_limit else output.current_level
        return Levels(
            output.voltage,
            output.current,
            output.voltage_level if output.voltage_guarded else None,
            over_A if output.current_guarded else None,
        )

    def settle(self, longest_s: float = 10.0) -> None:
        """Wait until everything that a process which has ended had sent is done."""
        until = time.monotonic() + longest_s
        while any(port._connections for port in self._servers._ports):
            assert time.monotonic() < until, "the connections of an ended process do not end"
            time.sleep(0.005)

    def anew(self) -> None:
        """Forget what was said so far: another process begins."""
        self.log, self.switched_on, self._aside = [], [], False
        self.arrived = lambda: None

    def truth(self, name: str) -> float:
        """A true value of the plant, now."""
        with self._lock:
            return self.plant.truth(name)


def planned_levels(stage: Path, bench: Path) -> list[Levels]:
    """What the supply may be on with: the steps of the plan, and the proof before them."""
    envelopes = read_board(stage, bench).job.plan.document()["envelopes"]
    assert isinstance(envelopes, list)
    keys = ("voltage_V", "current_limit_A", "over_voltage_V", "over_current_A")
    return [PROOF] + [Levels(*(envelope[key] for key in keys)) for envelope in envelopes]


def limits_missing(levels: Levels, planned: Sequence[Levels]) -> bool:
    """Whether an output that is on holds other levels than those of a step of the plan."""
    found = asdict(levels).values()
    return not any(
        all(
            level is not None and abs(level - wanted) <= 0.001
            for level, wanted in zip(found, asdict(one).values(), strict=True)
        )
        for one in planned
    )


@dataclass(frozen=True)
class Account:
    """What of the answers is in the record."""

    used: int
    """Readings that the process had, since it sent another message after each."""
    lost: tuple[str, ...]
    """Those of them that the record does not hold at their place."""
    unexplained: int
    """Recorded readings that nobody gave."""


def account(log: Sequence[Said], recorded: Sequence[Reading], bench: BenchFile) -> Account:
    """Hold a record against what the bench has answered, in order.

    An answer has to be recorded unless it came before the board was put in (no run then), was the
    last one (the process may never have seen it), or is of the looks that are not recorded by
    design: those at the ports before hands reach in, and the one question whether the supply
    limits its current while crossed leads are proved.
    """
    rows = [_given(reading.point, reading.value) for reading in recorded]
    begun = next((n for n, said in enumerate(log) if ":SIM:INS" in said.text), len(log))
    used, lost, reached = 0, [], {0}
    for number, said in enumerate(log):
        may_be_missing = (
            number < begun
            or number == len(log) - 1
            or said.aside
            or (said.proving and said.device == "supply")
        )
        for given in _readings(said, bench):
            after = {at + 1 for at in reached if at < len(rows) and rows[at] == given}
            if may_be_missing:
                reached |= after
                continue
            used += 1
            if after:
                reached = after
            else:
                lost.append(f"{given[0]} {given[1]!r}, answer {number} of {len(log)}")
    return Account(used, tuple(lost), len(rows) - max(reached))


def _given(point: str, value: float) -> Given:
    return point, value if math.isfinite(value) and abs(value) < OVERFLOW else None


def _readings(said: Said, bench: BenchFile) -> Iterator[Given]:
    """The readings in one answer; the supply's are readings while its output is on."""
    queries = [unit for unit in said.text.split(";") if "?" in unit]
    for query, answer in zip(queries, (said.answer or "").split(";"), strict=False):
        if said.device == "supply":
            which = re.match(r":MEAS:(VOLT|CURR)\?", query)
            if which and said.on:
                name = {"VOLT": "voltage", "CURR": "current"}[which[1]]
                yield _given(f"supply_{name}", float(answer))
        elif route := re.match(r":(?:READ|MEAS:TEMP)\? \(@(\d+)\)", query):
            for point, table in bench.points.items():
                if (table.instrument, table.route) == (said.device, route[1]):
                    yield _given(point, float(answer) / (table.shunt_ohm or 1.0))
