"""One exchange: settings, read-backs, readings and the error queue in one round trip."""

from __future__ import annotations

import threading

import pytest

from instruments.errors import (
    BadAnswer,
    BadNumber,
    ErrorEntry,
    InstrumentError,
    NotANumber,
    NotConfirmed,
    OutOfStep,
    Overload,
)
from instruments.link import Link
from instruments.session import MOST_ENTRIES, Session
from instruments.settings import Setting
from tests.instruments.scripted import IMPATIENT, TIMING, Fault, Instrument, serving, session_with


def test_open_checks_the_identity_and_empties_the_error_queue() -> None:
    instrument = Instrument(errors=['-420,"Query UNTERMINATED"'])
    with serving(instrument.message) as peer, session_with(peer) as session:
        assert session.identity == instrument.identity
        assert session.identify() == instrument.identity
        assert not session.out_of_step
        assert peer.messages == ["*IDN?", ":SYST:ERR?", ":SYST:ERR?", "*IDN?"]


def test_a_setting_is_one_round_trip_with_the_error_queue() -> None:
    with serving(Instrument().message) as peer, session_with(peer) as session:
        peer.messages.clear()
        session.set(":SOUR:VOLT 12")
        assert peer.messages == [":SOUR:VOLT 12;:SYST:ERR?"]


def test_settings_are_confirmed_in_one_round_trip() -> None:
    with serving(Instrument().message) as peer, session_with(peer) as session:
        peer.messages.clear()
        read_back = session.set_and_confirm(
            Setting(":SOUR:VOLT 12", ":SOUR:VOLT?", 12.0, 0.005),
            Setting(":OUTP ON", ":OUTP?", expected=True),
            Setting(":SOUR:FUNC CURRENT", ":SOUR:FUNC?", "CURR"),
        )
        assert read_back == ("12", "1", "CURRENT")
        assert peer.messages == [
            ":SOUR:VOLT 12;:OUTP ON;:SOUR:FUNC CURRENT;:SOUR:VOLT?;:OUTP?;:SOUR:FUNC?;:SYST:ERR?"
        ]


@pytest.mark.parametrize(
    ("setting", "answer"),
    [
        (Setting(":SOUR:VOLT 12", ":SOUR:VOLT?", 12.0, 0.005), "11.994"),
        (Setting(":OUTP ON", ":OUTP?", expected=True), "0"),
        (Setting(":SOUR:FUNC CURR", ":SOUR:FUNC?", "CURR"), "VOLT"),
    ],
)
def test_a_read_back_that_differs_is_not_confirmed(setting: Setting, answer: str) -> None:
    with (
        serving(Instrument(answers={setting.query: answer}).message) as peer,
        session_with(peer) as session,
    ):
        with pytest.raises(NotConfirmed, match="reads back as") as caught:
            session.set_and_confirm(setting)
        assert caught.value.asked == setting.expected
        assert caught.value.read_back == answer
        assert caught.value.command == setting.command
        assert not session.out_of_step


def test_a_read_back_within_the_resolution_is_confirmed() -> None:
    with (
        serving(Instrument(answers={":SOUR:VOLT?": "11.996"}).message) as peer,
        session_with(peer) as session,
    ):
        session.set_and_confirm(Setting(":SOUR:VOLT 12", ":SOUR:VOLT?", 12.0, 0.005))


def test_a_reading_is_one_round_trip() -> None:
    with (
        serving(Instrument(answers={":READ?": "1.234567E-01"}).message) as peer,
        session_with(peer) as session,
    ):
        peer.messages.clear()
        assert session.ask_number(":READ? (@101)", unit="V") == 0.1234567
        assert session.ask(":READ? (@101)") == "1.234567E-01"
        assert session.ask_all(":READ? (@101);:READ? (@102)", 2) == ("1.234567E-01",) * 2
        assert len(peer.messages) == 3


@pytest.mark.parametrize(("text", "kind"), [("9.9E37", Overload), ("9.91E37", NotANumber)])
def test_no_value_is_an_error_and_never_a_reading(text: str, kind: type[Exception]) -> None:
    with (
        serving(Instrument(answers={":READ?": text}).message) as peer,
        session_with(peer) as session,
    ):
        with pytest.raises(kind, match=r"meter \(TCPIP.*\[command ':READ\?'"):
            session.ask_number(":READ?")
        assert not session.out_of_step


def test_an_error_in_the_queue_is_raised_with_all_the_others() -> None:
    instrument = Instrument(rejects={":SOUR:VOLT": '-222,"Data out of range; 99 V"'})
    with serving(instrument.message) as peer, session_with(peer) as session:
        instrument.errors = ['-221,"Settings conflict"']
        with pytest.raises(InstrumentError, match="Data out of range; 99 V") as caught:
            session.set(":SOUR:VOLT 99")
        assert caught.value.entries == (
            ErrorEntry(-221, "Settings conflict"),
            ErrorEntry(-222, "Data out of range; 99 V"),
        )
        assert (caught.value.number, caught.value.text) == (-221, "Settings conflict")
        assert caught.value.command == ":SOUR:VOLT 99"
        session.set(":SOUR:CURR 1")


def test_an_undefined_query_is_its_error_and_not_a_bad_answer() -> None:
    # The instrument answers nothing to what it does not know, so a field is missing.
    instrument = Instrument(rejects={":RAED?": '-113,"Undefined header"'})
    with serving(instrument.message) as peer, session_with(peer) as session:
        with pytest.raises(InstrumentError) as caught:
            session.ask_number(":RAED?")
        assert caught.value.number == -113
        assert not session.out_of_step


def test_a_value_beside_an_error_is_never_a_reading() -> None:
    instrument = Instrument(answers={":READ?": "1.5"})
    with serving(instrument.message) as peer, session_with(peer) as session:
        instrument.errors = ['-230,"Data corrupt or stale"']
        with pytest.raises(InstrumentError, match="stale"):
            session.ask_number(":READ?")


def test_a_queue_that_never_ends_is_given_up() -> None:
    with (
        serving(Instrument(answers={}).message) as peer,
        session_with(peer) as session,
    ):
        peer.message = lambda _: '-350,"Queue overflow"'
        peer.messages.clear()
        with pytest.raises(InstrumentError) as caught:
            session.set(":SOUR:VOLT 1")
        assert caught.value.number == -350
        assert len(peer.messages) == MOST_ENTRIES + 1
        assert session.out_of_step


@pytest.mark.parametrize(
    "line",
    [
        "1.5",
        '0,"No error"',
        '1.5;2.5;0,"No error"',
        '1.5;0,"No err',
        '1.5;0,"No error";0,"No error"',
        'abc;0,"No error"',
        ';0,"No error"',
        "#!\x07\xff\xfe",
        "",
    ],
)
def test_garbage_is_never_a_reading_and_ends_the_step(line: str) -> None:
    with serving(Instrument().message) as peer, session_with(peer) as session:
        peer.faults = [Fault(":READ?", raw=line.encode("latin-1") + b"\n")]
        with pytest.raises(BadAnswer) as caught:
            session.ask_number(":READ?", unit="V")
        assert caught.value.received in line.encode("latin-1")
        assert session.out_of_step
        with pytest.raises(OutOfStep, match="Resynchronise"):
            session.ask_number(":READ?")


def test_a_register_that_should_be_a_boolean() -> None:
    with (
        serving(Instrument(answers={":OUTP?": "maybe"}).message) as peer,
        session_with(peer) as session,
    ):
        with pytest.raises(BadNumber, match="not a boolean"):
            session.set_and_confirm(Setting(":OUTP ON", ":OUTP?", expected=True))
        assert session.out_of_step


def test_traffic_sees_every_message_both_ways() -> None:
    said: list[tuple[str, str]] = []
    with serving(Instrument(answers={":READ?": "1.5"}).message) as peer:
        session = Session(
            Link("meter", peer.resource), TIMING, "Orrin Works", lambda *m: said.append(m)
        )
        session.open()
        session.ask_number(":READ?")
        session.blind(":OUTP OFF")
        session.close()
    assert said[-3:] == [
        (">", ":READ?;:SYST:ERR?"),
        ("<", '1.5;0,"No error"'),
        (">", ":OUTP OFF"),
    ]


def test_the_gap_between_exchanges_is_kept(monkeypatch: pytest.MonkeyPatch) -> None:
    now = [100.0]
    slept: list[float] = []

    class Time:
        @staticmethod
        def monotonic() -> float:
            return now[0]

        @staticmethod
        def sleep(seconds: float) -> None:
            slept.append(seconds)
            now[0] += seconds

    with serving(Instrument().message) as peer:
        session = Session(
            Link("meter", peer.resource), TIMING.model_copy(update={"gap_s": 0.5}), "Orrin Works"
        )
        monkeypatch.setattr("instruments.session.time", Time)
        session.open()
        now[0] += 0.2
        session.set(":SOUR:VOLT 1")
        session.close()
    assert slept == [pytest.approx(0.5), pytest.approx(0.3)]


def test_one_lock_covers_a_whole_exchange() -> None:
    with (
        serving(lambda text: Instrument().message(text)) as peer,
        session_with(peer) as session,
    ):
        peer.message = lambda text: f'{text.split(";", maxsplit=1)[0][6:]};0,"No error"'
        wrong: list[float] = []

        def ask(number: int) -> None:
            for _ in range(50):
                got = session.ask_number(f":ECHO?{number}")
                if got != number:
                    wrong.append(got)

        threads = [threading.Thread(target=ask, args=(n,)) for n in range(4)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        assert wrong == []
        assert len(peer.messages) >= 200
        assert not session.out_of_step


def test_the_timeout_grows_by_what_is_asked_for() -> None:
    with (
        serving(Instrument(answers={":READ?": "1.5"}).message) as peer,
        session_with(peer, IMPATIENT) as session,
    ):
        peer.faults = [Fault(":READ?", delay_s=4 * IMPATIENT.read_s)]
        assert session.ask_number(":READ?", extra_s=2.0) == 1.5
