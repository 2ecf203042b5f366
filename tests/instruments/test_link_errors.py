"""The link and the opening of a session: each way to fail is an error of its own."""

from __future__ import annotations

import socket

import pytest

from benchkit.errors import LinkError
from instruments import errors
from instruments.errors import (
    BadAnswer,
    CannotOpen,
    ConnectionRefused,
    ExchangeError,
    NoAnswer,
    PeerClosed,
    WrongInstrument,
)
from instruments.link import Link
from instruments.session import Session
from tests.instruments.scripted import (
    IMPATIENT,
    TIMING,
    Fault,
    Instrument,
    free_port,
    serving,
    session_with,
)


def test_every_error_is_a_link_error() -> None:
    kinds = [k for k in vars(errors).values() if isinstance(k, type) and issubclass(k, Exception)]
    assert len(kinds) > 12
    assert all(issubclass(kind, LinkError) for kind in kinds)


def test_a_refused_port_is_known_at_once() -> None:
    resource = f"TCPIP::127.0.0.1::{free_port()}::SOCKET"
    session = Session(Link("meter", resource), TIMING, "Orrin Works,T-100")
    with pytest.raises(ConnectionRefused) as caught:
        session.open()
    assert caught.value.role == "meter"
    assert caught.value.resource == resource
    assert caught.value.waited_s is not None
    assert "no other program holds its only connection" in str(caught.value)


@pytest.mark.parametrize("resource", ["nonsense", "TCPIP::no-such-host.invalid::5025::SOCKET"])
def test_what_cannot_be_opened_says_so(resource: str) -> None:
    link = Link("meter", resource)
    with pytest.raises(CannotOpen, match="Check the resource in the bench file") as caught:
        link.open(1.0)
    assert not isinstance(caught.value, ConnectionRefused)
    assert not link.is_open


def test_nagles_delay_is_switched_off() -> None:
    # Two writes in a row must not wait for a delayed acknowledgement.
    with serving(Instrument().message) as peer:
        link = Link("meter", peer.resource)
        link.open(1.0)
        try:
            assert link._socket is not None
            assert link._socket.getsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY) != 0
        finally:
            link.close()


def test_a_silent_peer_at_open() -> None:
    with (
        serving(lambda _: None) as peer,
        pytest.raises(NoAnswer) as caught,
        session_with(peer, IMPATIENT),
    ):
        pass
    assert caught.value.command == "*IDN?"
    assert caught.value.waited_s is not None
    assert caught.value.waited_s >= IMPATIENT.identify_s
    assert peer.resource in str(caught.value)


def test_a_peer_that_hangs_up_at_open() -> None:
    with serving(Instrument().message) as peer:
        peer.faults = [Fault("*IDN?", lost=True, hangs_up=True)]
        with pytest.raises(PeerClosed) as caught, session_with(peer):
            pass
    assert caught.value.command == "*IDN?"


@pytest.mark.parametrize(
    "answer",
    [
        "Orrin Works,T-1000,0042,1.0",
        "orrin works,T-100,0042,1.0",
        "Other Maker,T-100,0042,1.0",
        "Orrin Works",
        "",
    ],
)
def test_a_wrong_instrument(answer: str) -> None:
    with (
        serving(Instrument(identity=answer).message) as peer,
        pytest.raises(WrongInstrument, match="expected the identity") as caught,
        session_with(peer),
    ):
        pass
    assert caught.value.expected == "Orrin Works,T-100"
    assert caught.value.answered == answer


def test_a_truncated_line_gives_the_bytes_that_came() -> None:
    with serving(Instrument().message) as peer, session_with(peer, IMPATIENT) as session:
        peer.faults = [Fault(":READ?", raw=b"1.25E")]
        with pytest.raises(NoAnswer, match="stopped short") as caught:
            session.ask_number(":READ?")
    assert caught.value.received == b"1.25E"
    assert caught.value.role == "meter"
    assert caught.value.command == ":READ?;:SYST:ERR?"
    assert "b'1.25E'" in str(caught.value)


def test_a_line_in_pieces_is_one_line() -> None:
    with serving(Instrument().message) as peer, session_with(peer) as session:
        peer.faults = [Fault(":READ?", raw=b"1.2"), Fault("*WAI", raw=b'5;0,"No error"\n')]
        # The second half is provoked by a message that expects no answer of its own.
        peer.message = lambda _: None
        session.blind(":READ?")
        session.blind("*WAI")
        assert session._link.read(2.0) == '1.25;0,"No error"'


def test_an_endless_line_is_given_up(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("instruments.link.LONGEST_LINE", 100)
    with serving(Instrument().message) as peer, session_with(peer) as session:
        peer.faults = [Fault(":READ?", raw=b"x" * 5000)]
        with pytest.raises(BadAnswer, match="longer than 100 bytes") as caught:
            session.ask(":READ?")
    assert "(" in str(caught.value)
    assert len(str(caught.value)) < 600


def test_the_terminator_is_the_dialects() -> None:
    windows = TIMING.model_copy(update={"terminator": "\r\n"})
    with (
        serving(Instrument(answers={":READ?": "1.5"}).message, b"\r\n") as peer,
        session_with(peer, windows) as session,
    ):
        assert session.ask_number(":READ?") == 1.5
        peer.faults = [Fault(":READ?", raw=b'1.5;0,"No error"\n')]
        with pytest.raises(BadAnswer, match="does not end in"):
            session.ask_number(":READ?")


def test_a_carriage_return_too_many_is_named() -> None:
    with serving(Instrument(answers={":READ?": "1.5"}).message) as peer:
        peer.end = b"\n"
        with session_with(peer) as session:
            peer.faults = [Fault(":READ?", raw=b'1.5;0,"No error"\r\n')]
            with pytest.raises(BadAnswer, match="ends in a carriage return"):
                session.ask_number(":READ?")


def test_a_closed_session_says_so() -> None:
    with serving(Instrument().message) as peer:
        with session_with(peer) as session:
            pass
        with pytest.raises(PeerClosed, match="not open"):
            session.ask(":READ?")


@pytest.mark.parametrize(
    "breakage",
    [
        OSError(5, "Input/output error"),
        ConnectionResetError(104, "reset"),
        BrokenPipeError(32, "pipe"),
        ValueError("bare"),
        RuntimeError("bare"),
        TimeoutError("timed out"),
    ],
)
@pytest.mark.parametrize("method", ["sendall", "recv"])
def test_nothing_of_the_layers_below_escapes(breakage: Exception, method: str) -> None:
    class Broken:
        def __getattr__(self, name: str) -> object:
            def call(*_: object) -> None:
                if name == method:
                    raise breakage

            return call

    with serving(Instrument().message) as peer:
        link = Link("meter", peer.resource)
        link.open(1.0)
        link._socket = Broken()  # type: ignore[assignment]
        with pytest.raises(ExchangeError) as caught:
            link.query(":READ?", 0.1)
        link.close()
    assert caught.value.role == "meter"
    assert caught.value.command == ":READ?"
