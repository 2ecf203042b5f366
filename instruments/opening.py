"""Opens every session of a bench, the supplies first, and leaves nothing on when that fails."""

from __future__ import annotations

from contextlib import ExitStack, suppress

from benchkit.errors import LinkError, NotConfirmedOff
from benchkit.files.bench import BenchFile, Instrument
from benchkit.harness import Source
from instruments.dialects import SupplyDialect
from instruments.dialects.tables import Dialect, Timing
from instruments.link import Link
from instruments.session import Session
from instruments.supply import ScpiSupply
from instruments.traffic import Traffic


def supplies_of(file: BenchFile) -> dict[Source, tuple[str, Instrument]]:
    """Name and table of every supply, by what it is for."""
    found: dict[Source, tuple[str, Instrument]] = {"supply": file.only("supply")}
    if file.battery is not None:
        found["battery"] = file.battery
    return found


def open_all(
    stack: ExitStack,
    file: BenchFile,
    dialects: dict[str, Dialect],
    ports: dict[str, int],
    traffic: Traffic,
) -> dict[str, Session]:
    """Open the supplies first: if another instrument then fails, outputs can still be put off.

    When a supply itself cannot be reached nothing is known of its output, and the error says so
    (NotConfirmedOff), even though this suite has switched nothing on.
    """
    sessions: dict[str, Session] = {}
    supplies = {name for name, _ in supplies_of(file).values()}
    for name, item in sorted(file.instruments.items(), key=lambda each: each[0] not in supplies):
        try:
            sessions[name] = _open(
                stack, name, item, dialects[name].link, ports, traffic, file.bench.visa
            )
        except BaseException as error:
            _put_off(file, dialects, sessions, error)
            if name in supplies and isinstance(error, LinkError):
                raise NotConfirmedOff(
                    f"{error}\nNothing was switched on by this run, but {name} could not be "
                    "asked: see for yourself that its output is off"
                ) from error
            raise
    return sessions


def _put_off(
    file: BenchFile,
    dialects: dict[str, Dialect],
    sessions: dict[str, Session],
    error: BaseException,
) -> None:
    """Every output that can be reached, off; NotConfirmedOff where that is not certain."""
    doubts = []
    for name, item in supplies_of(file).values():
        if name not in sessions:
            continue
        dialect = dialects[name]
        assert isinstance(dialect, SupplyDialect)
        output = ScpiSupply(sessions[name], dialect, item.channel)
        try:
            found_on = output.state().output_on
            output.disable()
        except Exception as doubt:  # noqa: BLE001  whatever one raises, the next goes off
            with suppress(Exception):
                output.send_off()
            doubts.append(f"the {name} did not confirm that its output is off: {doubt}")
            continue
        if found_on:
            doubts.append(
                f"{name} was found switched on. It reads back as off now, but no meter could "
                f"confirm it: see for yourself. The bench could not be opened: {error}"
            )
    if doubts:
        raise NotConfirmedOff("; ".join(doubts)) from error


def _open(
    stack: ExitStack,
    name: str,
    item: Instrument,
    timing: Timing,
    ports: dict[str, int],
    traffic: Traffic,
    visa: str,
) -> Session:
    resource = item.resource
    if resource == "simulated":
        resource = f"TCPIP::127.0.0.1::{ports[name]}::SOCKET"
    link = Link(name, resource, terminator=timing.terminator, backend=visa)
    session = Session(link, timing, item.identity, traffic.of(name))
    stack.callback(session.close)
    session.open()
    return session
