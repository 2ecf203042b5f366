"""Does a process that is killed outright leave a bench and a record that can be gone on from?

    python -m tests.campaigns.kills [--kills N] [--seed N]

A board is measured in a process of its own (``tests.campaigns.kill_runner``: clock, lock and
person as on a real bench) on a simulated bench that lives here, in real time, and sees everything
(``tests.campaigns.kill_witness``). SIGKILL comes at a random moment: most often some milliseconds
after a random message, drawn more often while something is on, else at a random time. Then another
process opens the same bench, and its person puts no board in. The three ways in which supplies are
spoken to take turns; every fifth board is killed on its way to, or in, a soak.

The last line is a JSON object. What must be 0: ``lost_readings`` (the process had them and went
on, but the record does not hold them), ``unexplained_readings`` (recorded, but given by nobody),
``unreadable`` (run folders whose record, or whose `report` or its sentence, cannot be had),
``limits_unset`` (the output went on, or was left on, without the over-voltage, over-current and
current limit of a step of the plan), ``left_on`` and ``untold`` (outputs that the next process
found on and did not switch off, or did not tell in record and result), ``told_wrongly`` (it was
off), ``locks_left``, ``stopped`` (runs that ended by themselves, unfinished).
"""

from __future__ import annotations

import argparse
import contextlib
import io
import itertools
import json
import random
import signal
import sys
import tempfile
import threading
import time
from collections import Counter
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Literal

from benchkit.errors import BenchkitError, InputError
from benchkit.reading import Reading
from benchkit.records.record import read_record
from procedures.rebuild import rebuild
from tests.campaigns.kill_runner import Errand
from tests.campaigns.kill_shop import Processes, Workshop, held, own_locks
from tests.campaigns.kill_witness import Levels, Witness, account, limits_missing, planned_levels

KILLS = 200
SPEED = 30.0
SERIAL = "TG-0101"
SUPPLIES = ("supply-list", "supply-plain", "supply-select")
AFTER_MESSAGE_S = 0.004
"""A kill comes up to so long after its message: a reading takes 1 to 3 ms."""
MUST_BE_0 = (
    "lost_readings", "unexplained_readings", "unreadable", "limits_unset", "left_on", "untold",
    "told_wrongly", "locks_left", "stopped",
)  # fmt: skip


@dataclass(frozen=True)
class Extent:
    """How much a whole run is: what moments are drawn from."""

    messages: int
    while_on: int
    seconds: float


@dataclass(frozen=True)
class Moment:
    """When to kill: so long after a message, counted from 1, of all or of those that come while the
    output is on; or after the start."""

    of: Literal["messages", "while on", "start"]
    number: int
    after_s: float


@dataclass
class Tally:
    """What was found."""

    kills: int = 0
    ended_before: int = 0
    readings: int = 0
    switched_on: int = 0
    found_on: int = 0
    told: int = 0
    locks_held: int = 0
    reports: Counter[str] = field(default_factory=Counter)
    states: Counter[str] = field(default_factory=Counter)
    wrong: dict[str, list[str]] = field(default_factory=lambda: {key: [] for key in MUST_BE_0})

    def document(self) -> dict[str, object]:
        """For the last line."""
        return {
            "kills": self.kills,
            **{key: len(found) for key, found in self.wrong.items()},
            "readings": self.readings, "switched_on": self.switched_on, "found_on": self.found_on,
            "told": self.told, "locks_held": self.locks_held, "kills_by_state": dict(self.states),
            "reports": dict(self.reports), "runs_that_ended_before": self.ended_before,
        }  # fmt: skip


class Campaign:
    """All kills."""

    def __init__(
        self, folder: Path, seed: int, processes: Processes, extent: Extent | None
    ) -> None:
        self._processes = processes
        self._draw = random.Random(seed)
        self.tally = Tally()
        self._workshops = [Workshop(folder / supply, supply) for supply in SUPPLIES]
        self._planned: dict[Path, list[Levels]] = {}
        self._number = 0
        self._extent = extent or self._look()

    def _look(self) -> Extent:
        """One whole run, not killed: it is to be finished, with all of its readings recorded."""
        shop = self._workshops[0]
        with Witness(shop.served, SPEED) as witness:
            shop.know(witness.ports)
            errand = self._errand(shop, shop.stage, witness, "whole")
            process = self._processes.next()
            began = time.monotonic()
            process.go(errand)
            code, out, complaints = process.end()
            seconds = time.monotonic() - began
            assert code == 0, complaints
            assert json.loads(out)["status"] == "finished", out
            record = read_record(Path(errand.folder))
            found = account(witness.log, [r for _, r in record.readings], witness.bench)
        assert not found.lost, found.lost
        assert not found.unexplained
        extent = Extent(len(witness.log), sum(said.on for said in witness.log), seconds)
        print(f"a whole run: {extent}, {found.used} readings")
        return extent

    def _errand(self, shop: Workshop, stage: Path, witness: Witness, run: str) -> Errand:
        folder, control = str(shop.folder / run), witness.ports["control"]
        return Errand(str(shop.known), str(stage), SERIAL, folder, control)

    def _moment(self) -> Moment:
        kind, after_s = self._draw.random(), self._draw.uniform(0.0, AFTER_MESSAGE_S)
        if kind < 0.6:
            return Moment("while on", self._draw.randint(1, self._extent.while_on), after_s)
        if kind < 0.85:
            return Moment("messages", self._draw.randint(1, self._extent.messages), after_s)
        return Moment("start", 0, self._draw.uniform(0.0, self._extent.seconds))

    def kill_one(self) -> None:
        """Measure, kill, go on from there, and look at what is left."""
        number, self._number = self._number, self._number + 1
        shop = self._workshops[number % len(self._workshops)]
        stage = shop.soaked if number % 5 == 4 else shop.stage
        moment = self._moment()
        with Witness(shop.served, SPEED) as witness:
            resource = shop.know(witness.ports)
            if stage not in self._planned:
                self._planned[stage] = planned_levels(stage, shop.known)
            errand = self._errand(shop, stage, witness, f"run-{number}")
            if not self._killed(witness, errand, moment, resource):
                self.tally.ended_before += 1
                return
            where = f"kill {number} ({shop.folder.name}, {moment}, {witness.state})"
            self.tally.kills += 1
            self.tally.states[witness.state] += 1
            if held(resource):
                self._wrong("locks_left", where)
            self._check_levels(witness, self._planned[stage], where)
            self._check_record(witness, Path(errand.folder), where)
            found_on = witness.is_on
            witness.anew()
            following = replace(errand, folder=f"{errand.folder}-next", declines=True)
            self._go_on(witness, following, found_on, where)

    def _wrong(self, key: str, text: str) -> None:
        self.tally.wrong[key].append(text)
        print(f"{key}: {text}")

    def _killed(self, witness: Witness, errand: Errand, moment: Moment, resource: str) -> bool:
        """Have a board measured and its process killed; False when it had ended before."""
        process = self._processes.next()
        was_held = [False]

        def kill() -> None:
            # Before its first message the process may not have the lock, nor may it find it taken.
            was_held[0] = bool(witness.log) and held(resource)
            process.kill()

        timer = threading.Timer(moment.after_s, kill)
        left = itertools.count(moment.number - 1, -1)

        def arrived() -> None:
            if (moment.of == "messages" or witness.is_on) and next(left) == 0:
                timer.start()

        if moment.of == "start":
            timer.start()
        else:
            witness.arrived = arrived
        process.go(errand)
        code, out, complaints = process.end()
        timer.cancel()
        witness.settle()
        assert code in (0, -signal.SIGKILL), complaints
        if code == 0 and json.loads(out)["status"] != "finished":
            self._wrong("stopped", f"{moment}: {out}")
        self.tally.locks_held += was_held[0]
        return code != 0

    def _check_levels(self, witness: Witness, planned: list[Levels], where: str) -> None:
        self.tally.switched_on += len(witness.switched_on)
        left_on = [witness.levels()] if witness.is_on else []
        for levels in (*witness.switched_on, *left_on):
            if limits_missing(levels, planned):
                self._wrong("limits_unset", f"{where}: on with {levels}")

    def _check_record(self, witness: Witness, folder: Path, where: str) -> None:
        """The folder is readable, and holds what the process had."""
        readings: list[Reading] = []
        try:
            readings = [reading for _, reading in read_record(folder).readings]
        except InputError as error:
            self.tally.reports["no record yet"] += 1
            if any(":SIM:INS" in said.text for said in witness.log):
                self._wrong("unreadable", f"{where}: {error}")
        except Exception as fault:  # noqa: BLE001  whatever a user would see as a traceback
            self._wrong("unreadable", f"{where}: {fault!r}")
        found = account(witness.log, readings, witness.bench)
        self.tally.readings += found.used
        if found.unexplained:
            self._wrong("unexplained_readings", f"{where}: {found.unexplained}")
        for lost in found.lost:
            self._wrong("lost_readings", f"{where}: {lost}")
        try:
            with contextlib.redirect_stdout(io.StringIO()):
                rebuild([folder])
            said = "drawn"
        except BenchkitError as error:
            said = str(error).replace(str(folder), "").partition(": ")[2] or str(error)
        except Exception as fault:  # noqa: BLE001  as above
            self._wrong("unreadable", f"{where}: report: {fault!r}")
            return
        self.tally.reports[said] += 1

    def _go_on(self, witness: Witness, errand: Errand, found_on: bool, where: str) -> None:
        """The next process at this bench."""
        process = self._processes.next()
        process.go(errand)
        code, out, complaints = process.end()
        witness.settle()
        if code != 0:
            self._wrong("locks_left" if "in use by" in complaints else "untold",
                        f"{where}: the next start failed: {complaints}")  # fmt: skip
            return
        findings = " ".join(json.loads(out)["findings"])
        told = [
            text for text in read_record(Path(errand.folder)).said("found-on") if text in findings
        ]
        self.tally.found_on += found_on
        self.tally.told += bool(told)
        if found_on and not told:
            self._wrong("untold", where)
        if told and not found_on:
            self._wrong("told_wrongly", f"{where}: {told}")
        volts = abs(witness.truth("exposed_voltage"))
        if witness.is_on or volts > 0.5:
            self._wrong("left_on", f"{where}: {volts:.3g} V at the exposed port")


def campaign(kills: int, seed: int = 0, extent: Extent | None = None) -> dict[str, object]:
    """Kill so many processes, and say what was found. ``extent``: where it is known."""
    began = time.monotonic()
    with (
        tempfile.TemporaryDirectory() as name,
        own_locks(Path(name)),
        Processes() as processes,
    ):
        all_kills = Campaign(Path(name) / "benches", seed, processes, extent)
        while all_kills.tally.kills < kills:
            all_kills.kill_one()
    return {
        **all_kills.tally.document(), "seed": seed, "seconds": round(time.monotonic() - began, 1)
    }  # fmt: skip


def main() -> int:
    """As the module's text says; 1 when something that must be 0 is not."""
    parser = argparse.ArgumentParser(prog="python -m tests.campaigns.kills")
    parser.add_argument("--kills", type=int, default=KILLS)
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args()
    found = campaign(options.kills, options.seed)
    print(json.dumps(found))
    return int(any(found[key] for key in MUST_BE_0))


if __name__ == "__main__":
    sys.exit(main())
