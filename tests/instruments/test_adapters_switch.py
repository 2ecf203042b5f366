"""The switch unit and the polarity relay, their adapters against the simulated one over sockets."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from importlib import resources
from pathlib import Path

import pytest

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile
from instruments.dialects import SwitchDialect, load_dialect
from instruments.errors import BadNumber, InstrumentError, NotConfirmed
from instruments.link import Link
from instruments.relays import SETTLE_S, PolarityRelay
from instruments.session import Session
from instruments.simulated.server import serve
from instruments.switch import ScpiSwitch
from tests.instruments.scripted import IMPATIENT, Instrument, serving, session_with
from tests.instruments.simulated_fake import (
    WITH_BLEEDER,
    WITH_SWITCH,
    Bench,
    FakeWorld,
    bench_file,
)

IDENTITY = "Weir,R8"
TIMES = IMPATIENT.model_copy(update={"read_s": 0.3, "slow_s": 0.3})
STRAIGHT, CROSSED = "301", "302"
DIALECT = load_dialect("switch-plain", SwitchDialect)


def bench_with_switch(*swaps: tuple[str, str]) -> BenchFile:
    return bench_file(WITH_SWITCH, WITH_BLEEDER, *swaps)


@dataclass
class RelayWorld(FakeWorld):
    """Remembers every order in which contacts moved."""

    moves: list[tuple[str, bool]] = field(default_factory=list)

    def relay(self, route: str, closed: bool) -> None:
        if self.relays.get(route, False) != closed:
            self.moves.append((route, closed))
        super().relay(route, closed)


@dataclass
class Log:
    """What was sent, and the waits in between: a bench clock that takes no time."""

    said: list[str] = field(default_factory=list)
    slept_s: float = 0.0

    def traffic(self, direction: str, text: str) -> None:
        if direction == ">":
            self.said.append(text.removesuffix(";:SYST:ERR?"))

    def now(self) -> float:
        return self.slept_s

    def sleep(self, seconds: float) -> float:
        self.said.append(f"wait {seconds:g}")
        self.slept_s += seconds
        return self.slept_s


@contextmanager
def switch_over(world: FakeWorld, log: Log | None = None) -> Iterator[ScpiSwitch]:
    with serve(bench_with_switch(), world) as servers:
        link = Link("switch", f"TCPIP::127.0.0.1::{servers.ports['switch']}::SOCKET")
        session = Session(link, TIMES, IDENTITY, log.traffic if log else None)
        try:
            session.open()
            if log is not None:
                log.said.clear()
            yield ScpiSwitch(session, DIALECT)
        finally:
            session.close()


@pytest.fixture
def world() -> RelayWorld:
    return RelayWorld()


@pytest.fixture
def log() -> Log:
    return Log()


@pytest.fixture
def switch(world: RelayWorld, log: Log) -> Iterator[ScpiSwitch]:
    with switch_over(world, log) as switch:
        world.moves.clear()
        yield switch


@pytest.fixture
def relay(switch: ScpiSwitch, log: Log) -> PolarityRelay:
    return PolarityRelay(switch, STRAIGHT, CROSSED, log)


def test_a_relay_is_set_and_read_back(switch: ScpiSwitch, world: RelayWorld) -> None:
    assert switch.identify().startswith(IDENTITY)
    assert not switch.closed("305")
    switch.set("305", True)
    assert world.relays.get("305")
    assert switch.closed("305")
    switch.set("305", False)
    assert not world.relays.get("305")
    assert not switch.closed("305")


def test_a_digital_input_is_read_by_its_name(switch: ScpiSwitch, world: RelayWorld) -> None:
    world.lines = {"401": True, "loop.a": True, "402": False}
    assert switch.line("401")
    assert switch.line("loop.a")
    assert not switch.line("402")
    world.lines["401"] = False
    assert not switch.line("401")


def test_a_route_that_is_not_there(switch: ScpiSwitch, log: Log) -> None:
    with pytest.raises(InstrumentError) as caught:
        switch.set("999", True)
    assert caught.value.number == -222
    log.said.clear()
    with pytest.raises(InputError, match="channel '301,302' cannot be used"):
        switch.set("301,302", True)
    assert log.said == []


@pytest.mark.parametrize("crossed", [True, False])
def test_it_breaks_before_it_makes(
    relay: PolarityRelay, world: RelayWorld, log: Log, crossed: bool
) -> None:
    relay.set(not crossed)
    log.said.clear()
    world.moves.clear()
    relay.set(crossed)
    made, broken = (CROSSED, STRAIGHT) if crossed else (STRAIGHT, CROSSED)
    assert world.moves == [(broken, False), (made, True)]
    opened = [f":ROUT:OPEN (@{r});:ROUT:CLOS? (@{r})" for r in (STRAIGHT, CROSSED)]
    seen = [f":ROUT:CLOS? (@{r})" for r in (STRAIGHT, CROSSED)]
    wait = f"wait {SETTLE_S:g}"
    made_so = f":ROUT:CLOS (@{made});:ROUT:CLOS? (@{made})"
    assert log.said == [*opened, *seen, wait, *seen, made_so, wait, *seen]
    assert {route for route, closed in world.relays.items() if closed} == {made}


def test_a_pair_found_with_both_closed_is_opened_first(
    switch: ScpiSwitch, relay: PolarityRelay, world: RelayWorld
) -> None:
    switch.set(CROSSED, True)
    assert world.relays[STRAIGHT]
    world.moves.clear()
    relay.set(False)
    assert world.moves == [(STRAIGHT, False), (CROSSED, False), (STRAIGHT, True)]


@pytest.mark.parametrize("stuck", [STRAIGHT, CROSSED])
def test_a_relay_that_sticks_closed_keeps_the_other_from_closing(
    relay: PolarityRelay, world: RelayWorld, log: Log, stuck: str
) -> None:
    relay.set(stuck == CROSSED)
    world.fault("relay-stuck:switch", 0.0, float(stuck))
    world.moves.clear()
    log.said.clear()
    for crossed in (True, False):
        with pytest.raises(NotConfirmed, match="asked for False, but it reads back as 1"):
            relay.set(crossed)
    assert world.moves == []
    assert not any(text.startswith(":ROUT:CLOS (") for text in log.said)


def test_a_relay_that_sticks_open_is_told_to_open_again(
    relay: PolarityRelay, world: RelayWorld, log: Log
) -> None:
    relay.set(False)
    world.fault("relay-stuck:switch", 0.0, float(CROSSED))
    with pytest.raises(NotConfirmed, match="asked for True, but it reads back as 0"):
        relay.set(True)
    # Coming free later it must not close behind everybody's back.
    world.clear_faults()
    assert [text[:10] for text in log.said[-2:]] == [":ROUT:OPEN", ":ROUT:OPEN"]
    assert not world.relays[STRAIGHT]
    assert not world.relays[CROSSED]


@pytest.mark.parametrize("value", [1.0, float(CROSSED)])
def test_a_relay_that_lies_passes_the_adapter(
    relay: PolarityRelay, switch: ScpiSwitch, world: RelayWorld, value: float
) -> None:
    """Only a measurement finds it: read-back and contact differ."""
    world.fault("relay-lying:switch", 0.0, value)
    relay.set(True)
    assert switch.closed(CROSSED)
    assert not switch.closed(STRAIGHT)
    assert not world.relays[CROSSED]
    assert world.relays[STRAIGHT] == (value == 1.0)


def test_a_contact_goes_where_it_was_sent_once_it_is_free() -> None:
    bench = Bench(bench_with_switch())
    bench.world.fault("relay-stuck:switch", 0.0, 1.0)
    bench.tell("switch", ":ROUT:CLOS (@303)")
    assert bench.ask("switch", ":ROUT:CLOS? (@303);:ROUT:OPEN? (@303)") == "0;1"
    bench.world.clear_faults()
    bench.tell("control", ":SIM:TIME:ADV 1")
    assert bench.ask("switch", ":ROUT:CLOS? (@301:303)") == "1,0,1"
    assert bench.world.relays["303"]
    bench.tell("switch", "*RST")
    assert not any(bench.world.relays.values())


def test_a_bench_is_found_straight_and_a_board_moves_no_relay() -> None:
    bench = Bench(bench_with_switch())
    assert [route for route, closed in bench.world.relays.items() if closed] == [STRAIGHT]
    assert bench.ask("switch", ":ROUT:CLOS? (@301,302)") == "1,0"
    bench.tell("switch", ":ROUT:OPEN (@301);:ROUT:CLOS (@302)")
    bench.world.relays.clear()
    bench.tell("control", ':SIM:INS "SN-1","s.toml"')
    assert [route for route, closed in bench.world.relays.items() if closed] == [CROSSED]
    assert list(bench.world.relays)[-1] == CROSSED  # what is open was told before
    assert bench.ask("switch", ":ROUT:CLOS? (@301,302)") == "0,1"


@pytest.mark.parametrize("text", ["(401)", "(@401,402)", "(@40 1)", "(@)"])
def test_one_input_at_a_time(text: str) -> None:
    bench = Bench(bench_with_switch())
    assert bench.ask("switch", f":SENS:DIG:DATA? {text};:SYST:ERR?").startswith("-171")


def test_a_route_of_the_bench_file_that_is_no_number() -> None:
    with pytest.raises(InputError, match=r"wiring\.crossed is 'K2': the simulated switch unit"):
        Bench(bench_with_switch(('crossed = "302"', 'crossed = "K2"')))
    bench = Bench(bench_with_switch(('crossed = "302"', 'crossed = "12"')))
    bench.tell("switch", ":ROUT:CLOS (@12)")
    assert bench.world.relays["12"]


def test_one_route_is_no_pair(switch: ScpiSwitch, log: Log) -> None:
    with pytest.raises(InputError, match="both '301': they must be two"):
        PolarityRelay(switch, STRAIGHT, STRAIGHT, log)


def test_an_input_may_be_one_bit_of_a_register(tmp_path: Path) -> None:
    own = tmp_path / "own.toml"
    shipped = resources.files("instruments.dialects") / "switch-plain.toml"
    # The input's table is the last one of the file.
    own.write_text(shipped.read_text(encoding="utf-8") + "bit = 3\n", encoding="utf-8")
    instrument = Instrument()
    with (
        serving(instrument.message) as peer,
        session_with(peer, TIMES, role="switch") as session,
    ):
        switch = ScpiSwitch(session, load_dialect(own, SwitchDialect))
        for answer, level in (("8", True), ("7", False), ("+15", True)):
            instrument.answers[":SENS:DIG:DATA?"] = answer
            assert switch.line("401") is level
        instrument.answers[":SENS:DIG:DATA?"] = "high"
        with pytest.raises(BadNumber):
            switch.line("401")
        switch.recover()
        instrument.answers[":SENS:DIG:DATA?"] = "0"
        assert not switch.line("401")
