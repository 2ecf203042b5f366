"""Meter, thermometer and load."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from benchkit.protocols import Load
from instruments.dialects import LoadDialect, MeterDialect, ThermometerDialect, load_dialect
from instruments.errors import NoAnswer, NotANumber, NotConfirmed, Overload
from instruments.load import LoadState, ScpiLoad
from instruments.meter import ScpiMeter
from instruments.session import Session
from instruments.thermometer import ScpiThermometer
from tests.instruments.scripted import IMPATIENT, Fault, Instrument, Peer, serving, session_with

QUICK = IMPATIENT.model_copy(update={"slow_s": 0.2})
ROUTES = {"meter-scan": "101", "meter-single": None}


@pytest.fixture
def instrument() -> Instrument:
    return Instrument(answers={":READ?": "1.5E-01"})


@pytest.fixture
def peer(instrument: Instrument) -> Iterator[Peer]:
    # Configuring sets the range that is read back under another header.
    def message(text: str) -> str | None:
        return instrument.message(text.replace(":CONF:VOLT:DC ", ":SENS:VOLT:DC:RANG "))

    with serving(message) as peer:
        yield peer


@pytest.fixture
def session(peer: Peer) -> Iterator[Session]:
    with session_with(peer, QUICK) as session:
        peer.messages.clear()
        yield session


@pytest.fixture(params=ROUTES)
def dialect(request: pytest.FixtureRequest) -> MeterDialect:
    # The dialect's own table of times is not the session's here, which is quick.
    return load_dialect(str(request.param), MeterDialect).model_copy(update={"link": QUICK})


def test_a_meter_is_configured_once_and_then_only_for_changes(
    session: Session, dialect: MeterDialect, peer: Peer
) -> None:
    meter, route = ScpiMeter(session, dialect), ROUTES[dialect.name]
    meter.configure(route, 1.0, 10)
    meter.configure(route, 1.0, 10)
    assert len(peer.messages) == 1
    assert meter.read(route) == 0.15
    meter.configure(route, 1.0, 0.2)
    assert "CONF" not in peer.messages[-1]
    assert "NPLC 0.2" in peer.messages[-1]
    meter.configure(route, 10, 0.2)
    # Configuring resets the aperture, so it is sent again behind the range.
    assert 0 < peer.messages[-1].index("CONF") < peer.messages[-1].index("NPLC 0.2")
    assert len(peer.messages) == 4
    assert (meter.ranges_V[0], meter.apertures_nplc[-1]) == (0.1, 100)
    assert meter.identify().startswith("Orrin Works")


def test_routes_are_remembered_apart(session: Session, peer: Peer) -> None:
    meter = ScpiMeter(session, load_dialect("meter-scan", MeterDialect))
    for route in ("101", "102", "101", "102"):
        meter.configure(route, 1.0, 10)
    assert len(peer.messages) == 2


def test_a_meter_forgets_what_did_not_take(
    session: Session, dialect: MeterDialect, instrument: Instrument, peer: Peer
) -> None:
    meter, route = ScpiMeter(session, dialect), ROUTES[dialect.name]
    meter.configure(route, 1.0, 10)
    instrument.answers[":SENS:VOLT:DC:NPLC?"] = "10"
    with pytest.raises(NotConfirmed):
        meter.configure(route, 1.0, 0.2)
    meter.configure(route, 1.0, 10)
    assert "CONF" in peer.messages[-1]


def test_a_meter_forgets_when_the_connection_was_reopened(
    session: Session, dialect: MeterDialect, peer: Peer
) -> None:
    meter, route = ScpiMeter(session, dialect), ROUTES[dialect.name]
    meter.configure(route, 1.0, 10)
    session.resynchronise()
    meter.configure(route, 1.0, 10)
    assert "CONF" in peer.messages[-1]


def test_a_meters_overload_is_no_reading(
    session: Session, dialect: MeterDialect, instrument: Instrument
) -> None:
    meter, route = ScpiMeter(session, dialect), ROUTES[dialect.name]
    instrument.answers[":READ?"] = "9.90000000E+37"
    with pytest.raises(Overload):
        meter.read(route)
    instrument.answers[":READ?"] = "9.91E+37"
    with pytest.raises(NotANumber):
        meter.read(route)


def test_the_timeout_grows_with_the_aperture(
    session: Session, dialect: MeterDialect, peer: Peer
) -> None:
    meter, route = ScpiMeter(session, dialect), ROUTES[dialect.name]
    slow = Fault(":READ?", delay_s=4 * QUICK.read_s)
    meter.configure(route, 1.0, 100)
    # 100 power line cycles of a 50 Hz mains, twice: the value and the meter's own zero.
    assert meter.aperture_time_s(route) == 4.0
    peer.faults = [slow]
    assert meter.read(route) == 0.15
    meter.configure(route, 1.0, 0.02)
    peer.faults = [slow]
    assert meter.read(route, timeout_s=2.0) == 0.15
    peer.faults = [slow]
    with pytest.raises(NoAnswer):
        meter.read(route)


def test_a_thermometer_reads_degrees_celsius(session: Session, instrument: Instrument) -> None:
    thermometer = ScpiThermometer(session, load_dialect("thermometer-scan", ThermometerDialect))
    instrument.answers[":MEAS:TEMP?"] = "+2.35000000E+01"
    assert thermometer.read("201") == 23.5
    instrument.answers[":MEAS:TEMP?"] = "23.5 CEL"
    assert thermometer.read("201") == 23.5
    instrument.answers[":MEAS:TEMP?"] = "9.91E37"
    with pytest.raises(NotANumber, match="Check the sensor"):
        thermometer.read("201")
    assert thermometer.identify() == instrument.identity


def test_a_load_draws_and_releases(session: Session, instrument: Instrument, peer: Peer) -> None:
    adapter = ScpiLoad(session, load_dialect("load-plain", LoadDialect))
    load: Load = adapter
    load.draw(1.25)
    assert len(peer.messages) == 1
    values = instrument.values
    assert values[":SOUR:FUNC", ""] == "CURR"
    assert values[":SOUR:CURR", ""] == "1.25"
    assert values[":INP", ""] == "1"
    instrument.answers |= {":MEAS:VOLT?": "11.5", ":MEAS:CURR?": "1.249"}
    assert adapter.state() == LoadState(input_on=True, voltage_V=11.5, current_A=1.249)
    peer.faults = [Fault(":MEAS:VOLT?", lost=True)]
    with pytest.raises(NoAnswer):
        adapter.state()
    load.release()
    assert values[":INP", ""] == "0"
    assert adapter.identify() == instrument.identity


@pytest.mark.parametrize("query", [":SOUR:FUNC?", ":SOUR:CURR?", ":INP?"])
def test_a_load_refuses_what_did_not_take(
    session: Session, instrument: Instrument, query: str
) -> None:
    load = ScpiLoad(session, load_dialect("load-plain", LoadDialect))
    instrument.answers[query] = "VOLT" if query == ":SOUR:FUNC?" else "0"
    with pytest.raises(NotConfirmed):
        load.draw(1.25)
