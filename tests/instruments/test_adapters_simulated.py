"""The adapters against the simulated instruments, over real sockets, in every shipped dialect."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

import pytest

from benchkit.protocols import Protection
from instruments.dialects import (
    LoadDialect,
    MeterDialect,
    SupplyDialect,
    ThermometerDialect,
    load_dialect,
)
from instruments.errors import (
    BadAnswer,
    ConnectionRefused,
    ExchangeError,
    InstrumentError,
    NoAnswer,
    NotANumber,
    NotConfirmed,
    Overload,
    PeerClosed,
    WrongInstrument,
)
from instruments.link import Link
from instruments.load import ScpiLoad
from instruments.meter import ScpiMeter
from instruments.session import Session
from instruments.simulated.server import serve
from instruments.supply import ScpiSupply
from instruments.thermometer import ScpiThermometer
from tests.instruments.scripted import IMPATIENT
from tests.instruments.simulated_fake import FakeWorld, bench_file

QUICK = IMPATIENT.model_copy(update={"slow_s": 0.3, "set_s": 0.5, "identify_s": 0.5, "read_s": 0.1})
IDENTITIES = {
    "supply": "Northlight,NL-36",
    "load": "Northlight,EL-5",
    "meter": "Weir,S20",
    "thermometer": "Weir,T8",
}
SUPPLIES = {"supply-plain": None, "supply-list": "1", "supply-select": "1"}


def energised(world: FakeWorld) -> bool:
    """Whether the supply's relay is closed, as the world knows it."""
    return world.supply[2]


@contextmanager
def session_with(name: str, dialect: str, world: FakeWorld) -> Iterator[Session]:
    swaps = [('"supply-plain"', f'"{dialect}"')] if name == "supply" else []
    with serve(bench_file(*swaps), world) as servers:
        link = Link(name, f"TCPIP::127.0.0.1::{servers.ports[name]}::SOCKET")
        session = Session(link, QUICK, IDENTITIES[name])
        try:
            session.open()
            yield session
        finally:
            session.close()


@pytest.fixture
def world() -> FakeWorld:
    return FakeWorld()


@pytest.fixture(params=SUPPLIES)
def supply(request: pytest.FixtureRequest, world: FakeWorld) -> Iterator[ScpiSupply]:
    name = str(request.param)
    with session_with("supply", name, world) as session:
        yield ScpiSupply(session, load_dialect(name, SupplyDialect), SUPPLIES[name])


@pytest.fixture
def meter(world: FakeWorld) -> Iterator[ScpiMeter]:
    with session_with("meter", "meter-scan", world) as session:
        # The session's table of times is the quick one, and the meter's has to be the same.
        dialect = load_dialect("meter-scan", MeterDialect)
        yield ScpiMeter(session, dialect.model_copy(update={"link": QUICK}))


def test_a_supply_is_programmed_protected_enabled_and_disabled(
    supply: ScpiSupply, world: FakeWorld
) -> None:
    supply.program(12.0, 0.5)
    own_level = supply.dialect.over_current.level is not None
    assert supply.protect(Protection(14.0, 0.75)) == Protection(14.0, 0.75 if own_level else 0.5)
    assert not supply.state().output_on
    supply.enable()
    assert energised(world)
    state = supply.state()
    assert state.output_on
    assert state.voltage_V == pytest.approx(12.0, abs=0.05)
    assert (state.constant_current, state.tripped) == (False, False)
    supply.disable()
    assert not energised(world)
    assert not supply.state().output_on


def test_a_supply_says_that_it_limits_the_current(supply: ScpiSupply, world: FakeWorld) -> None:
    supply.program(12.0, 0.5)
    supply.enable()
    world.current, world.limits = 0.5, True
    assert supply.state().constant_current


def test_a_supply_trips_and_says_so(supply: ScpiSupply, world: FakeWorld) -> None:
    supply.program(12.0, 0.5)
    supply.protect(Protection(14.0, 0.6))
    supply.enable()
    # Above the level where there is one, and in the current limit where that is the level.
    world.current, world.limits = 0.7, True
    supply.state()
    world.elapse(1.0)
    assert supply.state().tripped
    assert not energised(world)
    world.current, world.limits = 0.0, False
    supply.protect(Protection(14.0, 0.6))
    assert not supply.state().tripped


def test_a_value_the_supply_cannot_give(supply: ScpiSupply) -> None:
    with pytest.raises(InstrumentError) as caught:
        supply.program(1000.0, 0.5)
    assert caught.value.number == -222


@pytest.mark.parametrize(
    ("fault", "value", "kind"),
    [
        ("late-answer", 0.2, NoAnswer),
        ("lost-answer", 1, NoAnswer),
        ("garbage", 1, ExchangeError),
        ("truncated", 1, NoAnswer),
        ("dropped-peer", 1, PeerClosed),
    ],
)
def test_a_supply_is_switched_off_after_any_fault_of_the_link(
    supply: ScpiSupply, world: FakeWorld, fault: str, value: float, kind: type[ExchangeError]
) -> None:
    supply.program(12.0, 0.5)
    supply.enable()
    world.fault(f"{fault}:supply", 0.0, value)
    with pytest.raises(kind):
        supply.state()
    world.clear_faults()
    supply.disable()
    assert not energised(world)


def test_an_output_that_sticks_is_never_confirmed(supply: ScpiSupply, world: FakeWorld) -> None:
    supply.program(12.0, 0.5)
    supply.enable()
    world.fault("stuck-output:supply", 0.0, 1.0)
    with pytest.raises(NotConfirmed):
        supply.disable()


def test_a_meter_reads(meter: ScpiMeter, world: FakeWorld) -> None:
    world.volts = {"drop": 0.25, "exposed_voltage": 12.0}
    meter.configure("101", 1.0, 10)
    assert meter.read("101") == pytest.approx(0.25, abs=1e-3)
    meter.configure("102", 1.0, 10)
    with pytest.raises(Overload):
        meter.read("102")
    meter.configure("102", 100.0, 0.2)
    assert meter.read("102") == pytest.approx(12.0, abs=0.01)


@pytest.mark.parametrize(
    ("fault", "value", "kind"),
    [
        ("late-answer", 0.6, NoAnswer),
        ("lost-answer", 1, NoAnswer),
        ("garbage", 1, BadAnswer),
        ("truncated", 1, NoAnswer),
        ("dropped-peer", 1, PeerClosed),
        ("queue-error", 1, InstrumentError),
    ],
)
def test_after_a_fault_the_next_reading_is_right(
    meter: ScpiMeter, world: FakeWorld, fault: str, value: float, kind: type[ExchangeError]
) -> None:
    meter.configure("101", 1.0, 0.2)
    meter.configure("103", 1.0, 0.2)
    world.volts = {"drop": 0.25, "guarded_voltage": 0.75}
    world.fault(f"{fault}:meter", 0.0, value)
    with pytest.raises(kind):
        meter.read("101")
    world.clear_faults()
    session = meter._session
    if session.out_of_step:
        session.resynchronise()
    assert meter.read("103") == pytest.approx(0.75, abs=1e-3)


def test_a_wrong_instrument_and_a_refused_port(world: FakeWorld) -> None:
    with session_with("meter", "meter-scan", world) as session:
        world.fault("wrong-identity:meter", 0.0, 1.0)
        with pytest.raises(WrongInstrument):
            session.identify()
        world.clear_faults()
        world.fault("refused-port:meter", 0.0, 1.0)
        session.close()
        for _ in range(100):
            try:
                session.open()
            except ConnectionRefused:
                break
            except ExchangeError:
                continue
        else:
            pytest.fail("the port was never refused")


def test_a_thermometer_reads(world: FakeWorld) -> None:
    with session_with("thermometer", "thermometer-scan", world) as session:
        dialect = load_dialect("thermometer-scan", ThermometerDialect)
        thermometer = ScpiThermometer(session, dialect)
        assert thermometer.read("101") == pytest.approx(40.0, abs=1.0)
        world.temperatures["case"] = None
        with pytest.raises(NotANumber):
            thermometer.read("101")


def test_a_load_draws_and_releases(world: FakeWorld) -> None:
    with session_with("load", "load-plain", world) as session:
        load = ScpiLoad(session, load_dialect("load-plain", LoadDialect))
        load.draw(1.25)
        assert load.state().input_on
        mode, value, on = world.load
        assert (mode, on) == ("CURR", True)
        assert value == pytest.approx(1.25, abs=0.02)
        load.release()
        assert not world.load[2]
