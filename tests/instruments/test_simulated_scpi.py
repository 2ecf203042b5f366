"""Common commands, status registers and what an error does to the rest of a message."""

from __future__ import annotations

import logging

import pytest

from benchkit.harness import Harness
from tests.instruments.simulated_fake import Bench, bench_file


@pytest.fixture
def bench() -> Bench:
    return Bench()


def test_identity_has_four_fields(bench: Bench) -> None:
    """IEEE 488.2 clause 10.14."""
    assert bench.ask("supply", "*IDN?") == "Northlight,NL-36,0,1.0"
    one_field = Bench(bench_file(('identity = "Weir,S20"', 'identity = "Weir"')))
    assert one_field.ask("meter", "*IDN?") == "Weir,SIM,0,1.0"


def test_responses_of_one_message_are_one_line(bench: Bench) -> None:
    """IEEE 488.2 clause 8.4: response message units are joined by ';'."""
    answer = bench.ask("supply", ":SOUR:VOLT 12;:SOUR:VOLT?;:SYST:ERR?")
    assert answer == '12.0000;0,"No error"'
    assert bench.ask("supply", ":SYST:ERR:COUN?;:SYST:VERS?;*OPC?;*TST?") == "0;1999.0;1;0"


def test_an_undefined_header_is_reported_in_the_same_reply(bench: Bench) -> None:
    assert bench.ask("supply", ":SOUR:VOLTT 12;:SYST:ERR?") == (
        '-113,"Undefined header;:SOUR:VOLTT"'
    )


def test_after_a_command_error_nothing_is_done_but_queries_are_answered(bench: Bench) -> None:
    answer = bench.ask("supply", ":SOUR:VOLT 5 A;:OUTP ON;:OUTP?;:SYST:ERR?")
    assert answer == '0;-131,"Invalid suffix"'
    assert bench.world.supply[2] is False
    assert bench.error("supply") == 0


def test_an_execution_error_concerns_its_unit_alone(bench: Bench) -> None:
    """IEEE 488.2 clause 11.5.1.1.5."""
    answer = bench.ask("supply", ":SOUR:VOLT 500;:SOUR:CURR 2;:SOUR:CURR?;:SYST:ERR?")
    assert answer == '2.0000;-222,"Data out of range;500 is outside 0 to 36"'


@pytest.mark.parametrize(
    ("message", "bit"),
    [(":NONSENSE", 32), (":SOUR:VOLT 500", 16), ("*OPC", 1)],
)
def test_event_status_bits(bench: Bench, message: str, bit: int) -> None:
    """IEEE 488.2 clause 11.5.1: command error 32, execution 16, operation complete 1."""
    assert bench.ask("supply", "*ESR?") == "128"  # power on
    assert bench.devices["supply"].execute(message) is None
    assert bench.ask("supply", "*ESR?;*ESR?") == f"{bit};0"


def test_status_byte_summarises(bench: Bench) -> None:
    """IEEE 488.2 clause 11.2: event summary 32, master summary 64; SCPI: error queue 4."""
    bench.tell("supply", "*CLS;*ESE 32;*SRE 32")
    assert bench.ask("supply", "*STB?") == "0"
    bench.devices["supply"].execute(":NONSENSE")
    assert bench.ask("supply", "*STB?;*ESE?;*SRE?") == "100;32;32"
    assert bench.devices["supply"].execute("*CLS") is None
    assert bench.ask("supply", "*STB?") == "0"


def test_registers_have_eight_bits(bench: Bench) -> None:
    assert bench.ask("supply", "*ESE 256;*ESE 41.6;*ESE?;:SYST:ERR?").startswith("42;-222")


def test_reset_keeps_the_error_queue(bench: Bench) -> None:
    """IEEE 488.2 clause 10.32: *RST does not touch status registers and queues."""
    bench.devices["supply"].execute(":SOUR:VOLT 5;:NONSENSE")
    answer = bench.ask("supply", "*RST;:SOUR:VOLT?;:SYST:ERR:COUN?")
    assert answer == "0.0000;1"


def test_a_message_takes_bench_time(bench: Bench) -> None:
    bench.ask("supply", "*IDN?;*IDN?")
    assert bench.world.now() == pytest.approx(0.0002)
    assert bench.ask("control", ":SIM:TIME?") == "0.000200"


def test_a_failing_world_is_a_device_error(
    bench: Bench, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def fail(probe: str) -> float:
        raise ArithmeticError(f"{probe} did not converge")

    monkeypatch.setattr(bench.world, "voltage", fail)
    with caplog.at_level(logging.ERROR):
        answer = bench.ask("meter", ":READ? (@101);:SYST:ERR?")
    assert answer == '-310,"System error;ArithmeticError: drop did not converge"'
    assert "the simulated world failed" in caplog.text
    assert bench.ask("meter", "*ESR?") == str(128 + 8)


def test_control_port(bench: Bench) -> None:
    assert bench.ask("control", ":SIM:TIME:ADV 2.5;:SIM:TIME?") == "2.500000"
    bench.tell("control", ':SIM:INS "SN-1","/a/stage.toml"')
    assert bench.world.inserted == [("SN-1", "/a/stage.toml")]
    bench.tell("control", ":SIM:FAUL 'late-answer:meter',1.5,0.2;:SIM:FAUL 'lead-off:drop',0")
    assert bench.world.faults == {"late-answer:meter": (1.5, 0.2), "lead-off:drop": (0, 1)}
    bench.tell("control", ":SIM:FAUL:CLE")
    assert bench.world.faults == {}
    assert float(bench.ask("control", ':SIM:TRUT? "drop"')) == 0.345
    assert bench.ask("control", ':SIM:TRUT? "never"') == "9.91E37"
    assert bench.ask("control", ":SIM:WIRE?") == '"supply","load",0,0'
    bench.tell("control", ':SIM:WIRE "","load",1')
    assert bench.world.harness == Harness((), ("load",), crossed=True)
    assert bench.ask("control", ":SIMULATION:WIRE?") == '"","load",1,0'
    bench.tell("control", ':SIM:WIRE "battery+load","supply",0,1 KOHM')
    assert bench.world.harness == Harness(("battery", "load"), ("supply",), bleeder_ohm=1000.0)
    assert bench.ask("control", ":SIM:WIRE?") == '"battery+load","supply",0,1000'
    bench.tell("control", ':SIM:WIRE "supply","load",0,0')
    assert bench.world.harness == Harness(("supply",), ("load",))


@pytest.mark.parametrize(
    ("message", "sentence"),
    [
        (':SIM:INS "SN","x"', 'x: there is no such file, give a ""stage"" file'),
        (':SIM:FAUL "gremlin",0', "there is no fault named 'gremlin'"),
        (
            ':SIM:WIRE "lamp","load",0',
            "'lamp' cannot be at the exposed port: it must be supply, battery, load, several "
            "joined by '+', or empty for an open port",
        ),
        (
            ':SIM:WIRE "load","supply+",0',
            "'' cannot be at the guarded port: it must be supply, battery, load, several joined "
            "by '+', or empty for an open port",
        ),
        (':SIM:WIRE "load","load",0', "the load cannot be at both ports"),
        (':SIM:TRUT? "beauty"', "there is no true value named 'beauty'"),
    ],
)
def test_sentences_of_the_world_reach_the_error_queue(
    bench: Bench, message: str, sentence: str
) -> None:
    answer = bench.ask("control", message + ";:SYST:ERR?")
    assert answer == f'-224,"Illegal parameter value;{sentence}"'


def test_time_does_not_run_backwards(bench: Bench) -> None:
    assert bench.ask("control", ":SIM:TIME:ADV -1;:SYST:ERR?").startswith("-222")
