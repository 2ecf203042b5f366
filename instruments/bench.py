"""Opens a bench: every session, in one place, and hands out only what may be used freely.

Whoever opens a bench gets its guard, its fixture and what is known of its instruments. The supply
and the load stay inside the guard.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, ExitStack, contextmanager, nullcontext
from dataclasses import dataclass, field
from pathlib import Path

from benchkit.errors import NotConfirmedOff
from benchkit.files.bench import BenchFile, Instrument
from benchkit.guard import Ceilings, Guard
from benchkit.harness import Source
from benchkit.protocols import Clock, Interlock, Journal, Operator
from benchkit.reading import Reading
from instruments.clock import SimulatedClock, WallClock
from instruments.dialects import (
    LoadDialect,
    MeterDialect,
    SupplyDialect,
    SwitchDialect,
    ThermometerDialect,
    load_dialect,
    shipped_dialects,
)
from instruments.dialects.tables import Dialect, Timing
from instruments.fixture import (
    Fixture,
    HandFixture,
    ReadyFixture,
    RelayFixture,
    SimulatedFixture,
)
from instruments.link import Link
from instruments.load import ScpiLoad
from instruments.lock import bench_lock
from instruments.loop import Loop
from instruments.meter import ScpiMeter
from instruments.opening import open_all, supplies_of
from instruments.points import BenchPoints
from instruments.relays import PolarityRelay
from instruments.session import Session
from instruments.simulated.child import start_child
from instruments.supply import ScpiSupply
from instruments.switch import ScpiSwitch
from instruments.thermometer import ScpiThermometer
from instruments.traffic import Traffic
from instruments.waits import longest_waits_s

CONTROL_TIMING = Timing(
    terminator="\n",
    open_s=10.0,
    identify_s=5.0,
    set_s=30.0,
    read_s=10.0,
    slow_s=30.0,
    gap_s=0.0,
    recover="reopen",
    error_query=":SYST:ERR?",
)
CONTROL_IDENTITY = "Simulated bench,control"
DIALECTS: dict[str, type[Dialect]] = {
    "supply": SupplyDialect,
    "meter": MeterDialect,
    "thermometer": ThermometerDialect,
    "load": LoadDialect,
    "switch": SwitchDialect,
}


@dataclass
class _WholeExchanges:
    """A clock behind a link: an exchange broken off half way would leave no time to go by."""

    clock: Clock
    shield: Callable[[], AbstractContextManager[None]]

    def now(self) -> float:
        """See Clock."""
        with self.shield():
            return self.clock.now()

    def sleep(self, seconds: float) -> float:
        """See Clock."""
        with self.shield():
            return self.clock.sleep(seconds)


@dataclass
class Bench:
    """An open bench."""

    file: BenchFile
    guard: Guard
    fixture: Fixture
    traffic: Traffic
    identities: dict[str, str]
    control: Session | None = field(default=None)
    """The simulated bench's control port, for campaigns that need the truth; else None."""


@contextmanager
def open_bench(
    file: BenchFile,
    path: Path,
    operator: Operator,
    journal: Journal,
    *,
    unattended: bool = False,
    shield: Callable[[], AbstractContextManager[None]] = nullcontext,
    watcher: Callable[[Reading], None] | None = None,
) -> Iterator[Bench]:
    """Open every instrument of a bench file and close them all at the end.

    unattended: nobody is there to put a board in or to move leads.


    Raises InputError for a bench file or dialect that cannot be used, and the errors of
    ``instruments.errors`` for an instrument that cannot be reached or is another. Outputs are
    confirmed off before anything is handed out, and whatever is raised inside leaves with outputs
    confirmed off, or as NotConfirmedOff.
    """
    dialects = {name: _dialect(path, name, item) for name, item in file.instruments.items()}
    with ExitStack() as stack:
        traffic = Traffic()
        ports: dict[str, int] = {}
        if file.is_simulated:
            ports = stack.enter_context(start_child(path)).ports
        else:
            for resource in {table.resource for _, table in supplies_of(file).values()}:
                stack.enter_context(bench_lock(resource))
        sessions = open_all(stack, file, dialects, ports, traffic)
        control: Session | None = None
        clock: Clock = WallClock()
        fixture: Fixture = ReadyFixture() if unattended else HandFixture(operator)
        if file.is_simulated:
            control = Session(
                Link("control", f"TCPIP::127.0.0.1::{ports['control']}::SOCKET", terminator="\n"),
                CONTROL_TIMING,
                CONTROL_IDENTITY,
            )
            stack.callback(control.close)
            control.open()
            clock = _WholeExchanges(SimulatedClock(control), shield)
            fixture = SimulatedFixture(control)
        fixture, interlock = _wired(file, sessions, dialects, clock, fixture)
        guard = _guard(
            file, sessions, dialects, clock, fixture, interlock, operator, journal,
            shield=shield, watcher=watcher,
        )  # fmt: skip
        identities = {name: session.identity for name, session in sessions.items()}
        try:
            guard.start_off()
            yield Bench(file, guard, fixture, traffic, identities, control)
        except BaseException as error:
            if not guard.confirmed_off and not isinstance(error, NotConfirmedOff):
                guard.make_safe(str(error) or type(error).__name__, error)
            raise


def _wired(
    file: BenchFile,
    sessions: dict[str, Session],
    dialects: dict[str, Dialect],
    clock: Clock,
    hands: Fixture,
) -> tuple[Fixture, Interlock | None]:
    """What moves leads on this bench, and its interlock loop, where it has one."""
    table = file.wiring
    if table is None:
        return hands, None
    dialect = dialects[table.instrument]
    assert isinstance(dialect, SwitchDialect)
    switch = ScpiSwitch(sessions[table.instrument], dialect)
    relay = None
    if table.straight is not None and table.crossed is not None:
        relay = PolarityRelay(switch, table.straight, table.crossed, clock)
    bleeder = None if table.bleeder is None else (switch, table.bleeder)
    fixture = RelayFixture(hands, relay, bleeder) if relay or bleeder else hands
    return fixture, None if table.loop is None else Loop(switch, table.loop)


def _guard(
    file: BenchFile,
    sessions: dict[str, Session],
    dialects: dict[str, Dialect],
    clock: Clock,
    fixture: Fixture,
    interlock: Interlock | None,
    operator: Operator,
    journal: Journal,
    *,
    shield: Callable[[], AbstractContextManager[None]],
    watcher: Callable[[Reading], None] | None,
) -> Guard:
    load_name, load_table = file.only("load")
    load_dialect_ = dialects[load_name]
    assert isinstance(load_dialect_, LoadDialect)
    supplies: dict[Source, ScpiSupply] = {}
    for source, (name, table) in supplies_of(file).items():
        dialect = dialects[name]
        assert isinstance(dialect, SupplyDialect)
        supplies[source] = ScpiSupply(sessions[name], dialect, table.channel)
    meters, thermometers = {}, {}
    for name, dialect in dialects.items():
        if isinstance(dialect, MeterDialect):
            meters[name] = ScpiMeter(sessions[name], dialect)
        elif isinstance(dialect, ThermometerDialect):
            thermometers[name] = ScpiThermometer(sessions[name], dialect)
    return Guard(
        supplies,
        ScpiLoad(sessions[load_name], load_dialect_, load_table.channel),
        BenchPoints(file, meters, thermometers),
        clock,
        operator,
        journal,
        Ceilings.of(file),
        {name: item.calibration_due for name, item in file.instruments.items()},
        dt.datetime.now(dt.UTC).date(),
        waits_s=longest_waits_s(file, dialects),
        wiring=fixture,
        interlock=interlock,
        shield=shield,
        watcher=watcher,
    )


def _dialect(path: Path, name: str, item: Instrument) -> Dialect:
    del name
    wanted = item.dialect
    place: str | Path = wanted if wanted in shipped_dialects() else path.parent / wanted
    return load_dialect(place, DIALECTS[item.kind])
