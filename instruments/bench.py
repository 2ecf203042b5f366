"""Opens a bench: every session, in one place, and hands out only what may be used freely.

Whoever opens a bench gets its guard, its fixture and what is known of its instruments. The supply
and the load stay inside the guard.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Iterator, Mapping
from contextlib import AbstractContextManager, ExitStack, contextmanager, nullcontext
from dataclasses import dataclass, field
from pathlib import Path

from benchkit.errors import LinkError, NotConfirmedOff
from benchkit.files.bench import BenchFile, Instrument, PointName
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
from instruments.dialects.tables import Dialect, Kind, Timing
from instruments.fixture import Fixture, HandFixture, SimulatedFixture
from instruments.link import Link
from instruments.load import ScpiLoad
from instruments.lock import bench_lock
from instruments.meter import SLOWEST_MAINS_HZ, ScpiMeter
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
    """Sends every SCPI message to the log of whatever run is going on.

    A log that fails (a full disk) must not keep a message from being sent, since it may be the one
    that switches off: the fault is kept, and raised by ``end``.
    """

    def __init__(self) -> None:
        self._log: Callable[[str, str, str], object] | None = None
        self._fault: Exception | None = None

    def begin(self, log: Callable[[str, str, str], object]) -> None:
        """Write to this log from now on."""
        self._log, self._fault = log, None

    def end(self) -> None:
        """Write nowhere any more; raises what kept the log from being whole."""
        self._log = None
        if self._fault is not None:
            raise self._fault

    def of(self, role: str) -> Callable[[str, str], object]:
        """The callable that one session reports to."""

        def report(direction: str, text: str) -> None:
            if self._log is not None:
                try:
                    self._log(role, direction, text)
                except Exception as fault:  # noqa: BLE001  see above
                    self._log, self._fault = None, fault

        return report


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
    shield: Callable[[], AbstractContextManager[None]] = nullcontext,
    watcher: Callable[[Reading], None] | None = None,
) -> Iterator[Bench]:
    """Open every instrument of a bench file and close them all at the end.

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
            stack.enter_context(bench_lock(file.only("supply")[1].resource))
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
            clock = _WholeExchanges(SimulatedClock(control), shield)
            fixture = SimulatedFixture(control)
        guard = _guard(
            file, sessions, dialects, clock, fixture, operator, journal,
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
    except BaseException as error:
        dialect = dialects[supply]
        assert isinstance(dialect, SupplyDialect)
        output = ScpiSupply(sessions[supply], dialect, table.channel)
        try:
            found_on = output.state().output_on
            output.disable()
        except LinkError as doubt:
            raise NotConfirmedOff(
                f"the supply did not confirm that its output is off: {doubt}"
            ) from error
        if found_on:
            raise NotConfirmedOff(
                f"{supply} was found switched on. It reads back as off now, but no meter could "
                f"confirm it: see for yourself. The bench could not be opened: {error}"
            ) from error
        raise
    return sessions


def longest_waits_s(file: BenchFile, dialects: Mapping[str, Dialect]) -> float:
    """What instruments may take, at most, from a look being due until it is done and output-off
    is sent, in seconds: every answer comes at the end of its timeout.

    One operation of a procedure that had just begun (a point configured and read, or the load
    set), then the look at supply, case and one voltage, then a lost connection to the supply that
    is opened again, twice, before output-off gets through. Emptying an error queue that an
    instrument has filled counts as one answer.
    """

    def allowed(name: str, *kinds: Kind) -> float:
        link = dialects[name].link
        return sum(link.timeout(kind) + link.gap_s for kind in kinds)

    operations = [allowed(file.only("load")[0], "set")]
    for point in file.points.values():
        meter = dialects[point.instrument]
        if isinstance(meter, MeterDialect):
            aperture_s = meter.reading.apertures * point.aperture_nplc / SLOWEST_MAINS_HZ
            operations.append(allowed(point.instrument, "set", "read") + aperture_s)
        else:
            operations.append(allowed(point.instrument, "read"))
    supply = file.only("supply")[0]
    look = allowed(supply, "read") + allowed(file.points["case"].instrument, "read")
    voltages: tuple[PointName, ...] = ("guarded_voltage", "exposed_voltage")
    look += max(allowed(file.points[p].instrument, "set", "read") for p in voltages)
    return max(operations) + look + 2 * dialects[supply].link.open_s


def _guard(
    file: BenchFile,
    sessions: dict[str, Session],
    dialects: dict[str, Dialect],
    clock: Clock,
    fixture: Fixture,
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
        waits_s=longest_waits_s(file, dialects),
        wiring=fixture,
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
