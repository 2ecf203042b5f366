"""Out of step: a late answer is never taken for the next one."""

from __future__ import annotations

import threading

import pytest

from instruments.dialects import Timing
from instruments.errors import (
    BadAnswer,
    ConnectionRefused,
    NoAnswer,
    OutOfStep,
    PeerClosed,
    WrongInstrument,
)
from tests.instruments.scripted import (
    IMPATIENT,
    NO_ERROR,
    Fault,
    Instrument,
    Peer,
    serving,
    session_with,
)

REOPEN = IMPATIENT.model_copy(update={"slow_s": 0.5})
CLEAR = REOPEN.model_copy(update={"recover": "clear"})
both_ways = pytest.mark.parametrize("timing", [REOPEN, CLEAR], ids=["reopen", "clear"])


def meter() -> Instrument:
    return Instrument(answers={":READ?": "2.0"})


def late(peer: Peer, value: str = "1.0") -> None:
    """The next reading is answered with ``value``, four times later than allowed."""
    raw = f"{value};{NO_ERROR}\n".encode()
    peer.faults = [Fault(":READ?", raw=raw, delay_s=4 * IMPATIENT.read_s)]


@both_ways
def test_a_late_answer_is_never_the_next_reading(timing: Timing) -> None:
    with serving(meter().message) as peer, session_with(peer, timing) as session:
        late(peer)
        with pytest.raises(NoAnswer, match="has to be resynchronised"):
            session.ask_number(":READ?")
        sent = len(peer.messages)
        with pytest.raises(OutOfStep):
            session.ask_number(":READ?")
        with pytest.raises(OutOfStep):
            session.set(":SOUR:VOLT 1")
        with pytest.raises(OutOfStep):
            session.identify()
        assert len(peer.messages) == sent, "nothing may be asked out of step"
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0
        assert peer.late_sent.wait(5)


@both_ways
def test_a_late_answer_that_comes_while_resynchronising_is_discarded(timing: Timing) -> None:
    with serving(meter().message) as peer, session_with(peer, timing) as session:
        peer.faults = [Fault(":READ?", lost=True)]
        with pytest.raises(NoAnswer):
            session.ask_number(":READ?")
        # The gateway delivers the missing answer right before that of the first number.
        original = peer.message

        def behind(text: str) -> str | None:
            if text.startswith("*ESE"):
                peer.message = original
                peer.say(f"1.0;{NO_ERROR}\n".encode())
            return original(text)

        peer.message = behind
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0


def test_a_late_answer_that_looks_like_the_number_is_found_out() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        original = peer.message
        forged: list[str] = []

        def forging(text: str) -> str | None:
            # An old answer that happens to be the number comes first, its own answer later.
            if text.startswith("*ESE") and not forged:
                forged.append(text.partition(";")[0].removeprefix("*ESE "))
                peer.say(f"{forged[0]}\n".encode())
                threading.Event().wait(0.05)
            return original(text)

        peer.message = forging
        session.resynchronise()
        assert len(forged) == 1
        assert session.ask_number(":READ?") == 2.0


def test_a_number_that_comes_twice_is_taken_off() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        original = peer.message

        def twice(text: str) -> str | None:
            answer = original(text)
            return f"{answer}\n{answer}" if text.startswith("*ESE") and answer else answer

        peer.message = twice
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0


@both_ways
def test_a_lost_answer(timing: Timing) -> None:
    with serving(meter().message) as peer, session_with(peer, timing) as session:
        peer.faults = [Fault(":READ?", lost=True)]
        with pytest.raises(NoAnswer) as caught:
            session.ask_number(":READ?")
        assert caught.value.received == b""
        assert session.out_of_step
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0


def test_two_answers_at_once() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        peer.faults = [Fault(":READ?", raw=f"1.0;{NO_ERROR}\n2.0;{NO_ERROR}\n".encode())]
        with pytest.raises(BadAnswer, match="more than one line"):
            session.ask_number(":READ?")
        assert session.out_of_step
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0


def test_an_answer_nobody_asked_for() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        peer.say(f"1.0;{NO_ERROR}\n".encode())
        deadline = threading.Event()
        for _ in range(500):
            if session._link.waiting():
                break
            deadline.wait(0.01)
        with pytest.raises(OutOfStep, match="not asked for"):
            session.ask_number(":READ?")
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0


def test_a_peer_dropped_in_mid_exchange_comes_back() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        peer.faults = [Fault(":READ?", raw=b"1.", hangs_up=True)]
        with pytest.raises(PeerClosed) as caught:
            session.ask_number(":READ?")
        assert caught.value.received == b"1."
        assert session.out_of_step
        session.resynchronise()
        assert session.connections == 2
        assert session.ask_number(":READ?") == 2.0


def test_a_peer_that_is_gone_for_good() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        peer.close()
        with pytest.raises(PeerClosed):
            session.ask_number(":READ?")
        with pytest.raises(ConnectionRefused):
            session.resynchronise()
        with pytest.raises(ConnectionRefused):
            session.blind(":OUTP OFF")
        assert session.out_of_step


def test_another_instrument_after_the_gap() -> None:
    instrument = meter()
    with serving(instrument.message) as peer, session_with(peer, REOPEN) as session:
        peer.faults = [Fault(":READ?", lost=True)]
        with pytest.raises(NoAnswer):
            session.ask_number(":READ?")
        instrument.identity = "Other Maker,X,1,1"
        with pytest.raises(WrongInstrument):
            session.resynchronise()
        assert session.out_of_step


def test_a_peer_that_stays_silent_cannot_be_brought_back() -> None:
    quick = REOPEN.model_copy(update={"slow_s": 0.05})
    with serving(meter().message) as peer, session_with(peer, quick) as session:
        peer.message = lambda _: None
        with pytest.raises(NoAnswer, match="cannot be brought back into step"):
            session.resynchronise()
        assert session.out_of_step
        peer.message = meter().message
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0


def test_errors_found_while_resynchronising_are_returned_and_not_blamed_on_the_next() -> None:
    instrument = meter()
    with serving(instrument.message) as peer, session_with(peer, REOPEN) as session:
        instrument.errors = ['-410,"Query INTERRUPTED"']
        assert [entry.number for entry in session.resynchronise()] == [-410]
        assert session.ask_number(":READ?") == 2.0
        assert instrument.values["*ESE", ""] == "0"


def test_an_interrupt_in_mid_exchange_leaves_the_session_out_of_step(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        with monkeypatch.context() as patch:

            def interrupted(*_: object, **__: object) -> str:
                raise KeyboardInterrupt

            patch.setattr(session._link, "read", interrupted)
            with pytest.raises(KeyboardInterrupt):
                session.ask_number(":READ?")
        assert session.out_of_step
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0


def test_blind_leaves_even_out_of_step_and_waits_for_nothing() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        peer.faults = [Fault(":READ?", lost=True)]
        with pytest.raises(NoAnswer):
            session.ask_number(":READ?")
        session.blind(":OUTP OFF")
        assert session.out_of_step
        session.resynchronise()
        assert ":OUTP OFF" in peer.messages


def test_blind_opens_a_lost_connection_again() -> None:
    with serving(meter().message) as peer, session_with(peer, REOPEN) as session:
        peer.faults = [Fault(":READ?", lost=True, hangs_up=True)]
        with pytest.raises(PeerClosed):
            session.ask_number(":READ?")
        session.blind(":OUTP OFF")
        session.resynchronise()
        assert ":OUTP OFF" in peer.messages


def test_blind_does_not_wait_for_another_threads_long_reading() -> None:
    patient = REOPEN.model_copy(update={"read_s": 20.0})
    with serving(meter().message) as peer, session_with(peer, patient) as session:
        asked = threading.Event()
        original = peer.message

        def held(text: str) -> str | None:
            if text.startswith(":READ?"):
                asked.set()
                return None
            if text == ":OUTP OFF":
                return f"3.0;{NO_ERROR}"
            return original(text)

        peer.message = held
        refused: list[OutOfStep] = []

        def read() -> None:
            with pytest.raises(OutOfStep, match="sent blind") as caught:
                session.ask_number(":READ?")
            refused.append(caught.value)

        reader = threading.Thread(target=read)
        reader.start()
        assert asked.wait(5)
        session.blind(":OUTP OFF")
        reader.join(5)
        # The reading only ended because the message went out while it was still waited for.
        assert not reader.is_alive()
        assert len(refused) == 1
        assert session.out_of_step
        peer.message = original
        session.resynchronise()
        assert session.ask_number(":READ?") == 2.0
