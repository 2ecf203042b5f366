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

from benchkit.errors import LinkError, NotConfirmedOff
from benchkit.files.bench import BenchFile, Instrument
from benchkit.guard import Ceilings, Guard
from benchkit.protocols import Clock, Journal, Operator
from benchkit.reading import Reading
from instruments.clock import SimulatedClock, WallClock
from instruments.dialects import (
    LoadDialect,
    MeterDialect,
    SupplyDialect,
    ThermometerDialect,
    load_dialect,
    shipped_dialects,
)
from instruments.dialects.tables import Dialect, Timing
from instruments.fixture import Fixture, HandFixture, SimulatedFixture
from instruments.link import Link
from instruments.load import ScpiLoad
from instruments.meter import ScpiMeter
from instruments.points import BenchPoints
from instruments.session import Session
from instruments.simulated.child import start_child
from instruments.supply import ScpiSupply
from instruments.thermometer import ScpiThermometer

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
}


class Traffic:
    """Sends every SCPI message to the log of whatever run is going on."""

    def __init__(self) -> None:
        self.log: Callable[[str, str, str], object] | None = None

    def of(self, role: str) -> Callable[[str, str], object]:
        """The callable that one session reports to."""

        def report(direction: str, text: str) -> None:
            if self.log is not None:
                self.log(role, direction, text)

        return report


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
    shield: Callable[[], AbstractContextManager[None]] = nullcontext,
    watcher: Callable[[Reading], None] | None = None,
) -> Iterator[Bench]:
    """Open every instrument of a bench file and close them all at the end.

    Raises InputError for a bench file or dialect that cannot be used, and the errors of
    ``instruments.errors`` for an instrument that cannot be reached or is another.
    """
    dialects = {name: _dialect(path, name, item) for name, item in file.instruments.items()}
    with ExitStack() as stack:
        traffic = Traffic()
        ports: dict[str, int] = {}
        if file.is_simulated:
            ports = stack.enter_context(start_child(path)).ports
        sessions = _open_all(stack, file, dialects, ports, traffic)
        control: Session | None = None
        clock: Clock = WallClock()
        fixture: Fixture = HandFixture(operator)
        if file.is_simulated:
            control = Session(
                Link("control", f"TCPIP::127.0.0.1::{ports['control']}::SOCKET", terminator="\n"),
                CONTROL_TIMING,
                CONTROL_IDENTITY,
            )
            stack.callback(control.close)
            control.open()
            clock, fixture = SimulatedClock(control), SimulatedFixture(control)
        guard = _guard(
            file, sessions, dialects, clock, operator, journal, shield=shield, watcher=watcher
        )
        identities = {name: session.identity for name, session in sessions.items()}
        yield Bench(file, guard, fixture, traffic, identities, control)


def _open_all(
    stack: ExitStack,
    file: BenchFile,
    dialects: dict[str, Dialect],
    ports: dict[str, int],
    traffic: Traffic,
) -> dict[str, Session]:
    """Open the supply first: if another instrument then fails, the output can still be put off.

    When the supply itself cannot be reached nothing is known of its output, and the error says so
    (NotConfirmedOff), even though this suite has switched nothing on.
    """
    supply, table = file.only("supply")
    try:
        sessions = {supply: _open(stack, supply, table, dialects[supply].link, ports, traffic)}
    except LinkError as error:
        raise NotConfirmedOff(
            f"{error}\nNothing was switched on by this run, but the supply could not be asked: "
            "see for yourself that its output is off"
        ) from error
    try:
        for name, item in file.instruments.items():
            if name not in sessions:
                link = dialects[name].link
                sessions[name] = _open(stack, name, item, link, ports, traffic)
    except LinkError:
        dialect = dialects[supply]
        assert isinstance(dialect, SupplyDialect)
        try:
            ScpiSupply(sessions[supply], dialect, table.channel).disable()
        except LinkError as error:
            raise NotConfirmedOff(
                f"the supply did not confirm that its output is off: {error}"
            ) from error
        raise
    return sessions


def _guard(
    file: BenchFile,
    sessions: dict[str, Session],
    dialects: dict[str, Dialect],
    clock: Clock,
    operator: Operator,
    journal: Journal,
    *,
    shield: Callable[[], AbstractContextManager[None]],
    watcher: Callable[[Reading], None] | None,
) -> Guard:
    supply_name, supply_table = file.only("supply")
    load_name, load_table = file.only("load")
    supply_dialect, load_dialect_ = dialects[supply_name], dialects[load_name]
    assert isinstance(supply_dialect, SupplyDialect)
    assert isinstance(load_dialect_, LoadDialect)
    meters, thermometers = {}, {}
    for name, dialect in dialects.items():
        if isinstance(dialect, MeterDialect):
            meters[name] = ScpiMeter(sessions[name], dialect)
        elif isinstance(dialect, ThermometerDialect):
            thermometers[name] = ScpiThermometer(sessions[name], dialect)
    return Guard(
        ScpiSupply(sessions[supply_name], supply_dialect, supply_table.channel),
        ScpiLoad(sessions[load_name], load_dialect_, load_table.channel),
        BenchPoints(file, meters, thermometers),
        clock,
        operator,
        journal,
        Ceilings.of(file.bench),
        {name: item.calibration_due for name, item in file.instruments.items()},
        dt.datetime.now(dt.UTC).date(),
        shield=shield,
        watcher=watcher,
    )


def _dialect(path: Path, name: str, item: Instrument) -> Dialect:
    del name
    wanted = item.dialect
    place: str | Path = wanted if wanted in shipped_dialects() else path.parent / wanted
    return load_dialect(place, DIALECTS[item.kind])


def _open(
    stack: ExitStack,
    name: str,
    item: Instrument,
    timing: Timing,
    ports: dict[str, int],
    traffic: Traffic,
) -> Session:
    resource = item.resource
    if resource == "simulated":
        resource = f"TCPIP::127.0.0.1::{ports[name]}::SOCKET"
    link = Link(name, resource, terminator=timing.terminator)
    session = Session(link, timing, item.identity, traffic.of(name))
    stack.callback(session.close)
    session.open()
    return session
