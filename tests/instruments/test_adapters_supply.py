"""The supply adapter, the same tests for every supply dialect."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import pytest

from benchkit.protocols import Protection, Supply, SupplyState
from instruments.dialects import SupplyDialect, load_dialect
from instruments.errors import (
    ConnectionRefused,
    ExchangeError,
    InstrumentError,
    NoAnswer,
    NotConfirmed,
    Overload,
    PeerClosed,
)
from instruments.session import Session
from instruments.supply import ScpiSupply
from tests.instruments.scripted import IMPATIENT, Fault, Instrument, Peer, serving, session_with

QUICK = IMPATIENT.model_copy(update={"slow_s": 0.2})
CHANNELS = {"supply-plain": None, "supply-list": "2", "supply-select": "2"}


@dataclass
class Bench:
    supply: ScpiSupply
    session: Session
    peer: Peer
    instrument: Instrument

    @property
    def output(self) -> str | None:
        """The output as the instrument itself knows it."""
        return self.instrument.values.get((":OUTP", self.supply.channel or ""))

    def questionable(self, bits: int) -> None:
        for register in (":STAT:QUES:COND?", ":STAT:QUES:INST:ISUM2:COND?"):
            self.instrument.answers[register] = str(bits)


@pytest.fixture(params=CHANNELS)
def bench(request: pytest.FixtureRequest) -> Iterator[Bench]:
    name = str(request.param)
    instrument = Instrument()
    with serving(instrument.message) as peer, session_with(peer, QUICK, role="source") as session:
        supply = ScpiSupply(session, load_dialect(name, SupplyDialect), CHANNELS[name])
        peer.messages.clear()
        yield Bench(supply, session, peer, instrument)


def test_it_is_a_supply(bench: Bench) -> None:
    supply: Supply = bench.supply
    assert supply.role == "source"
    assert bench.supply.identify() == bench.instrument.identity


def test_program_confirms_both_in_one_round_trip(bench: Bench) -> None:
    bench.supply.program(12.5, 0.25)
    assert len(bench.peer.messages) == 1
    channel = bench.supply.channel or ""
    assert bench.instrument.values[":SOUR:VOLT", channel] == "12.5"
    assert bench.instrument.values[":SOUR:CURR", channel] == "0.25"


@pytest.mark.parametrize("query", [":SOUR:VOLT?", ":SOUR:CURR?"])
def test_program_refuses_a_read_back_that_differs(bench: Bench, query: str) -> None:
    bench.instrument.answers[query] = "5.0"
    with pytest.raises(NotConfirmed, match=r"reads back as 5\.0"):
        bench.supply.program(12.5, 0.25)


def test_protect_returns_what_was_read_back(bench: Bench) -> None:
    bench.supply.program(12.0, 0.5)
    found = bench.supply.protect(Protection(15.0, 0.75))
    own_level = bench.supply.dialect.over_current.level is not None
    # Without a level of its own, over-current trips at the current limit.
    assert found == Protection(15.0, 0.75 if own_level else 0.5)


def test_protect_refuses_a_level_that_did_not_take(bench: Bench) -> None:
    bench.instrument.answers[":SOUR:VOLT:PROT?"] = "60"
    with pytest.raises(NotConfirmed):
        bench.supply.protect(Protection(15.0, 0.75))


def test_protect_refuses_a_protection_that_did_not_arm(bench: Bench) -> None:
    if bench.supply.dialect.over_current.arm is None:
        # This family has no request to arm: the level is all there is to be refused.
        bench.instrument.answers[":SOUR:CURR:PROT?"] = "60"
    else:
        bench.instrument.answers[":SOUR:CURR:PROT:STAT?"] = "0"
    with pytest.raises(NotConfirmed):
        bench.supply.protect(Protection(15.0, 0.75))


def test_protect_refuses_a_trip_that_stays(bench: Bench) -> None:
    bench.questionable(512)
    bench.instrument.answers[":SOUR:VOLT:PROT:TRIP?"] = "1"
    with pytest.raises(NotConfirmed, match="still tripped"):
        bench.supply.protect(Protection(15.0, 0.75))


def test_enable_and_disable_are_confirmed(bench: Bench) -> None:
    bench.supply.enable()
    assert bench.output == "1"
    bench.supply.disable()
    assert bench.output == "0"
    bench.instrument.answers[":OUTP?"] = "0"
    with pytest.raises(NotConfirmed):
        bench.supply.enable()


def test_state_is_one_round_trip(bench: Bench) -> None:
    bench.instrument.answers |= {":OUTP?": "1", ":MEAS:VOLT?": "11.98", ":MEAS:CURR?": "4.9E-1"}
    assert bench.supply.state() == SupplyState(
        output_on=True, voltage_V=11.98, current_A=0.49, constant_current=False, tripped=False
    )
    assert len(bench.peer.messages) == 1
    queries = bench.peer.messages[0].split(";")
    assert len(queries) == len(set(queries)), "nothing is asked twice"
    assert bench.supply.measure() == (11.98, 0.49)


def test_state_knows_constant_current(bench: Bench) -> None:
    bench.questionable(1)
    state = bench.supply.state()
    assert (state.constant_current, state.tripped) == (True, False)


@pytest.mark.parametrize(("bit", "query"), [(512, ":SOUR:VOLT"), (1024, ":SOUR:CURR")])
def test_state_knows_a_trip(bench: Bench, bit: int, query: str) -> None:
    bench.questionable(bit)
    bench.instrument.answers[f"{query}:PROT:TRIP?"] = "1"
    state = bench.supply.state()
    assert (state.constant_current, state.tripped) == (False, True)


def test_state_is_never_an_overload(bench: Bench) -> None:
    bench.instrument.answers[":MEAS:CURR?"] = "9.9E37"
    with pytest.raises(Overload):
        bench.supply.state()


@pytest.mark.parametrize(
    "fault",
    [
        Fault(":MEAS:VOLT?", lost=True),
        Fault(":MEAS:VOLT?", raw=b"garbage\n"),
        Fault(":MEAS:VOLT?", raw=b"1;2"),
        Fault(":MEAS:VOLT?", raw=b"1.0;0;0", hangs_up=True),
        Fault(":MEAS:VOLT?", delay_s=0.3),
    ],
    ids=["lost", "garbage", "truncated", "dropped", "late"],
)
def test_disable_works_out_of_step(bench: Bench, fault: Fault) -> None:
    bench.supply.enable()
    bench.peer.faults = [fault]
    with pytest.raises(ExchangeError):
        bench.supply.state()
    assert bench.session.out_of_step
    sent = len(bench.peer.messages)
    bench.supply.disable()
    assert "OUTP OFF" in bench.peer.messages[sent], "off goes out before anything else"
    assert bench.output == "0"
    assert not bench.supply.state().output_on


def test_disable_sends_off_before_it_does_anything_that_can_fail(bench: Bench) -> None:
    bench.supply.enable()
    bench.peer.faults = [Fault(":MEAS:VOLT?", lost=True)]
    with pytest.raises(NoAnswer):
        bench.supply.state()
    bench.peer.refuse()
    with pytest.raises(ConnectionRefused):
        bench.supply.disable()
    bench.peer.close()
    assert bench.output == "0"


def test_disable_overcomes_one_lost_answer_and_old_errors(bench: Bench) -> None:
    bench.supply.enable()
    bench.peer.faults = [Fault(":OUTP?", lost=True)]
    bench.supply.disable()
    bench.supply.enable()
    bench.instrument.errors = ['-221,"Settings conflict"']
    bench.supply.disable()
    assert bench.output == "0"


def test_disable_says_when_the_output_stays_on(bench: Bench) -> None:
    bench.supply.enable()
    bench.instrument.answers[":OUTP?"] = "1"
    with pytest.raises(NotConfirmed, match="asked for False, but it reads back as 1"):
        bench.supply.disable()


def test_disable_says_when_it_is_refused(bench: Bench) -> None:
    bench.instrument.rejects[":OUTP"] = '-203,"Command protected"'
    with pytest.raises(InstrumentError, match="Command protected"):
        bench.supply.disable()


def test_disable_says_when_nothing_answers(bench: Bench) -> None:
    bench.peer.message = lambda _: None
    with pytest.raises(NoAnswer):
        bench.supply.disable()
    assert any("OUTP OFF" in message for message in bench.peer.messages)


def test_disable_says_when_the_instrument_is_gone(bench: Bench) -> None:
    bench.peer.close()
    with pytest.raises(ExchangeError, match="source"):
        bench.supply.disable()


def test_close_closes_the_session(bench: Bench) -> None:
    bench.supply.close()
    with pytest.raises(PeerClosed):
        bench.supply.state()
