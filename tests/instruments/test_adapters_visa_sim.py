"""The adapters against instruments that nobody here wrote (``visa_sim.py``), on every bus."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path

import pytest

from benchkit.protocols import Protection
from instruments.dialects import (
    Dialect,
    LoadDialect,
    MeterDialect,
    SupplyDialect,
    ThermometerDialect,
    load_dialect,
    shipped_dialects,
)
from instruments.errors import (
    BadAnswer,
    CannotOpen,
    InstrumentError,
    NoAnswer,
    NotANumber,
    NotConfirmed,
    Overload,
    WrongInstrument,
)
from instruments.link import Link
from instruments.load import LoadState
from instruments.meter import ScpiMeter
from instruments.session import Session
from instruments.supply import ScpiSupply
from tests.instruments.visa_sim import BUSES, LOAD, METERS, SUPPLIES, THERMOMETER, Shelf

LISTED = {"supply-list": "2", "meter-scan": "101"}
every_bus = pytest.mark.parametrize("bus", BUSES)
every_supply = pytest.mark.parametrize("name", SUPPLIES)
every_meter = pytest.mark.parametrize("name", METERS)


@pytest.fixture
def shelf(tmp_path: Path) -> Iterator[Shelf]:
    with ExitStack() as stack:
        yield Shelf(tmp_path, stack)


def to(name: str, unit: str) -> str:
    """The same unit as the dialect sends it to its channel."""
    if name not in LISTED:
        return unit
    return f"{unit}{' ' if unit.endswith('?') else ','}(@{LISTED[name]})"


def test_every_shipped_dialect_has_its_stand_in() -> None:
    kinds = (SupplyDialect, MeterDialect, ThermometerDialect, LoadDialect)
    spoken = {n for n in shipped_dialects() if isinstance(load_dialect(n, Dialect), kinds)}
    assert {*SUPPLIES, *METERS, THERMOMETER, LOAD} == spoken


@every_bus
@every_supply
def test_a_supply_lives_a_whole_step(shelf: Shelf, name: str, bus: str) -> None:
    supply = shelf.supply(name, bus)
    assert supply.identify().startswith("Orrin Works,")
    supply.program(12.25, 0.5)
    own_level = supply.dialect.over_current.level is not None
    assert supply.protect(Protection(14.5, 0.75)) == Protection(14.5, 0.75 if own_level else 0.5)
    assert not supply.state().output_on
    supply.enable()
    state = supply.state()
    assert (state.output_on, state.constant_current, state.tripped) == (True, False, False)
    assert supply.measure() == (state.voltage_V, state.current_A) == (11.98, 0.49)
    supply.disable()
    assert not supply.state().output_on


@every_bus
@every_meter
def test_a_meter_is_configured_and_read(shelf: Shelf, name: str, bus: str) -> None:
    meter, route = shelf.meter(name, bus), METERS[name]
    assert meter.identify().startswith("Orrin Works,M-")
    meter.configure(route, 1.0, 10)
    assert meter.read(route) == 0.15
    meter.configure(route, 0.1, 0.02)
    assert meter.read(route) == 0.15


@every_bus
def test_a_thermometer_is_read(shelf: Shelf, bus: str) -> None:
    thermometer = shelf.thermometer(bus)
    assert thermometer.identify() == "Orrin Works,T-8,0042,1.0"
    assert thermometer.read("101") == 23.5


@every_bus
def test_a_load_draws_and_releases(shelf: Shelf, bus: str) -> None:
    load = shelf.load(bus)
    assert load.identify() == "Orrin Works,E-5,0042,1.0"
    load.draw(1.25)
    assert load.state() == LoadState(input_on=True, voltage_V=11.501, current_A=1.249)
    load.release()
    assert not load.state().input_on


@every_bus
def test_another_instrument_is_refused(shelf: Shelf, bus: str) -> None:
    dialect = shelf.dialect("supply-plain", SupplyDialect, bus)
    with pytest.raises(WrongInstrument, match=r"'Orrin Works,P-36,0042,1\.0' answered"):
        shelf.session(dialect, bus, identity="Orrin Works,P-3")


@every_supply
@pytest.mark.parametrize(
    ("unit", "do"),
    [
        (":SOUR:VOLT 12.25", lambda supply: supply.program(12.25, 0.5)),
        (":SOUR:CURR 0.5", lambda supply: supply.program(12.25, 0.5)),
        (":SOUR:VOLT:PROT 14.5", lambda supply: supply.protect(Protection(14.5, 0.75))),
        (":OUTP ON", lambda supply: supply.enable()),
        (":OUTP OFF", lambda supply: supply.disable()),
    ],
)
def test_what_a_supply_takes_and_does_not_do(
    shelf: Shelf, name: str, unit: str, do: Callable[[ScpiSupply], object]
) -> None:
    supply = shelf.supply(name, answers={to(name, unit): None})
    if unit == ":OUTP OFF":
        supply.enable()
    with pytest.raises(NotConfirmed, match="but it reads back as") as caught:
        do(supply)
    assert to(name, unit) in caught.value.command


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("supply-plain", ":SOUR:CURR:PROT 0.75"),
        ("supply-select", ":SOUR:CURR:PROT 0.75"),
        ("supply-select", ":SOUR:VOLT:PROT:STAT ON"),
        ("supply-select", ":SOUR:CURR:PROT:STAT ON"),
        ("supply-list", ":SOUR:CURR:PROT:STAT ON"),
    ],
)
def test_a_protection_that_is_not_there(shelf: Shelf, name: str, unit: str) -> None:
    supply = shelf.supply(name, answers={to(name, unit): None})
    with pytest.raises(NotConfirmed):
        supply.protect(Protection(14.5, 0.75))


@pytest.mark.parametrize(
    ("name", "query", "tripped", "limiting"),
    [
        ("supply-plain", ":SOUR:VOLT:PROT:TRIP?", "1", None),
        ("supply-plain", ":SOUR:CURR:PROT:TRIP?", "1", None),
        ("supply-plain", ":STAT:QUES:COND?", None, "1"),
        ("supply-list", ":SOUR:VOLT:PROT:TRIP? (@2)", "1", None),
        ("supply-list", ":SOUR:CURR:PROT:TRIP? (@2)", "1", None),
        ("supply-list", ":STAT:QUES:INST:ISUM2:COND?", None, "1"),
        ("supply-select", ":STAT:QUES:INST:ISUM2:COND?", "512", "1"),
        ("supply-select", ":STAT:QUES:INST:ISUM2:COND?", "1024", "1"),
    ],
)
def test_a_supply_says_that_it_tripped_or_limits(
    shelf: Shelf, name: str, query: str, tripped: str | None, limiting: str | None
) -> None:
    if limiting is not None:
        state = shelf.supply(name, answers={query: limiting}).state()
        assert (state.constant_current, state.tripped) == (True, False)
    if tripped is not None:
        supply = shelf.supply(name, answers={query: tripped})
        state = supply.state()
        assert (state.constant_current, state.tripped) == (False, True)
        with pytest.raises(NotConfirmed, match="still tripped"):
            supply.protect(Protection(14.5, 0.75))


@pytest.mark.parametrize("name", ["supply-list", "supply-select"])
def test_two_outputs_of_one_supply_are_kept_apart(shelf: Shelf, name: str) -> None:
    dialect = shelf.dialect(name, SupplyDialect)
    session = shelf.session(dialect)
    first, second = ScpiSupply(session, dialect, "1"), ScpiSupply(session, dialect, "2")
    first.program(5.0, 1.0)
    second.program(12.0, 0.25)
    second.enable()
    assert (first.state().output_on, second.state().output_on) == (False, True)
    first.enable()
    second.disable()
    assert (first.state().output_on, second.state().output_on) == (True, False)
    with pytest.raises(InstrumentError):
        ScpiSupply(session, dialect, "7").program(5.0, 1.0)


@every_meter
@pytest.mark.parametrize("unit", [":CONF:VOLT:DC 1", ":SENS:VOLT:DC:NPLC 10"])
def test_what_a_meter_takes_and_does_not_do(shelf: Shelf, name: str, unit: str) -> None:
    meter = shelf.meter(name, answers={to(name, unit): None})
    for _ in range(2):
        with pytest.raises(NotConfirmed):
            meter.configure(METERS[name], 1.0, 10)


@pytest.mark.parametrize("unit", [":SOUR:FUNC CURR", ":SOUR:CURR 1.25", ":INP ON", ":INP OFF"])
def test_what_a_load_takes_and_does_not_do(shelf: Shelf, unit: str) -> None:
    load = shelf.load(answers={unit: None})
    with pytest.raises(NotConfirmed) as caught:
        load.draw(1.25)
        load.release()
    assert caught.value.command == unit


@every_meter
def test_a_meter_that_has_no_value(shelf: Shelf, name: str) -> None:
    texts = {"9.9E37": Overload, "-9.90000000E+37": Overload, "9.91E37": NotANumber}
    for answer, kind in {**texts, "NAN": BadAnswer}.items():
        meter = shelf.meter(name, answers={to(name, ":READ?"): answer})
        with pytest.raises(kind):
            meter.read(METERS[name])


def test_a_thermometer_that_has_no_value(shelf: Shelf) -> None:
    thermometer = shelf.thermometer(answers={":MEAS:TEMP? (@102)": "+9.91000000E+37"})
    with pytest.raises(NotANumber, match="Check the sensor"):
        thermometer.read("102")
    assert thermometer.read("101") == 23.5


@every_supply
def test_a_supply_whose_current_overloads(shelf: Shelf, name: str) -> None:
    with pytest.raises(Overload):
        shelf.supply(name, answers={to(name, ":MEAS:CURR?"): "9.9E37"}).state()


@every_supply
def test_what_a_supply_refuses_is_in_its_error_queue(shelf: Shelf, name: str) -> None:
    supply = shelf.supply(name)
    supply.program(12.25, 0.5)
    with pytest.raises(InstrumentError, match='-100,"Command error"') as caught:
        supply.program(99.0, 99.0)
    # The message held two refused settings; the second entry is found by emptying the queue.
    assert [entry.number for entry in caught.value.entries] == [-100, -100]
    assert not supply.state().output_on


@every_bus
def test_a_request_that_an_instrument_does_not_know(shelf: Shelf, bus: str) -> None:
    dialect = shelf.dialect("meter-single", MeterDialect, bus)
    session = shelf.session(dialect, bus)
    reading = dialect.reading.model_copy(update={"query": ":FETC:ALL?"})
    with pytest.raises(InstrumentError, match="Command error"):
        ScpiMeter(session, dialect.model_copy(update={"reading": reading})).read(None)
    assert ScpiMeter(session, dialect).read(None) == 0.15


@every_bus
def test_an_instrument_without_an_error_queue(shelf: Shelf, bus: str) -> None:
    dialect = shelf.dialect(LOAD, LoadDialect, bus)
    quick = dialect.model_copy(update={"link": dialect.link.model_copy(update={"set_s": 0.05})})
    with pytest.raises(NoAnswer) as caught:
        shelf.session(quick, bus, {":SYST:ERR?": None})
    assert caught.value.command == ":SYST:ERR?"


@every_bus
def test_the_rest_of_a_torn_answer_outlives_the_connection(shelf: Shelf, bus: str) -> None:
    supply = shelf.supply("supply-plain", bus, {":MEAS:VOLT?": "11.\n98"})
    session = supply._session
    supply.enable()
    with pytest.raises(BadAnswer):
        supply.state()
    assert session.out_of_step
    supply.disable()
    assert session.connections == 2
    assert session.ask(":OUTP?") == "OFF"


def test_a_line_that_ends_in_another_way(shelf: Shelf) -> None:
    dialect = shelf.dialect(LOAD, LoadDialect)
    library = shelf.library(LOAD, {}, "\r\n")
    link = Link("load", BUSES["serial"], terminator="\n", backend=library)
    timing = dialect.link.model_copy(update={"identify_s": 0.05})
    with pytest.raises(NoAnswer, match="command '\\*IDN\\?'"):
        Session(link, timing, "Orrin Works").open()


@pytest.mark.parametrize("resource", ["VXI0::1::INSTR", "nonsense"])
def test_a_resource_that_cannot_be(shelf: Shelf, resource: str) -> None:
    with pytest.raises(CannotOpen, match=r"load-plain\.yaml@sim"):
        Link("load", resource, backend=shelf.library(LOAD, {})).open(1.0)


@pytest.mark.parametrize("library", ["missing.yaml@sim", "@none", "missing.so"])
def test_a_library_that_is_not_there(tmp_path: Path, library: str) -> None:
    named = library if library.startswith("@") else f"{tmp_path}/{library}"
    with pytest.raises(CannotOpen, match=re.escape(library)):
        Link("load", "GPIB0::5::INSTR", backend=named).open(1.0)
