"""The served bench over raw sockets: framing, faults of the link, real time, clean ends."""

from __future__ import annotations

import socket
import threading
import time
from collections.abc import Iterator
from contextlib import closing

import pytest

from benchkit.errors import InputError
from instruments.simulated import INSTRUMENT_FAULTS
from instruments.simulated.server import LONGEST_MESSAGE, Servers, serve
from instruments.simulated.timebase import RealTime
from tests.instruments.simulated_fake import FakeWorld, bench_file


class Client:
    """A raw socket that reads lines."""

    def __init__(self, port: int) -> None:
        self.socket = socket.create_connection(("127.0.0.1", port), timeout=5)
        self.stream = self.socket.makefile("rb")

    def send(self, text: str | bytes) -> None:
        self.socket.sendall(text if isinstance(text, bytes) else text.encode())

    def ask(self, text: str) -> str:
        self.send(text + "\n")
        line = self.stream.readline()
        assert line.endswith(b"\n"), line
        return line[:-1].decode("latin-1")

    def silent(self, seconds: float = 0.1) -> bool:
        """True when nothing comes for so long."""
        self.socket.settimeout(seconds)
        try:
            return not self.socket.recv(1, socket.MSG_PEEK)
        except TimeoutError:
            return True
        finally:
            self.socket.settimeout(5)

    def close(self) -> None:
        self.stream.close()
        self.socket.close()


@pytest.fixture
def world() -> FakeWorld:
    return FakeWorld()


@pytest.fixture
def served(world: FakeWorld) -> Iterator[Servers]:
    with serve(bench_file(), world) as servers:
        yield servers


@pytest.fixture
def meter(served: Servers) -> Iterator[Client]:
    with closing(Client(served.ports["meter"])) as client:
        yield client


@pytest.fixture
def control(served: Servers) -> Iterator[Client]:
    with closing(Client(served.ports["control"])) as client:
        yield client


def fault(control: Client, name: str, value: float | None = None) -> None:
    tail = "" if value is None else f",{value}"
    assert control.ask(f':SIM:FAUL "{name}",0{tail};:SYST:ERR?') == '0,"No error"'


def test_every_instrument_has_a_port(served: Servers) -> None:
    assert list(served.ports) == ["supply", "load", "meter", "thermometer", "control"]
    for name, port in served.ports.items():
        with closing(Client(port)) as client:
            assert client.ask("*IDN?").count(",") == 3, name


def test_a_route_that_is_no_number_is_an_input_error(world: FakeWorld) -> None:
    with pytest.raises(InputError, match=r"points\.drop\.route is 'A1'"):
        serve(bench_file(('route = "101" }\nexposed', 'route = "A1" }\nexposed')), world)


def test_messages_may_come_in_pieces_and_in_one(meter: Client) -> None:
    meter.send("*ID")
    assert meter.silent(0.05)
    assert meter.ask("N?\r").startswith("Weir")
    meter.send("*OPC?\n*OPC?;*OPC?\n*OPC?")
    assert [meter.stream.readline() for _ in range(2)] == [b"1\n", b"1;1\n"]
    meter.send("\n")
    assert meter.stream.readline() == b"1\n"


def test_connections_share_one_instrument(served: Servers, meter: Client) -> None:
    meter.send(":NONSENSE\n")
    assert meter.ask("*OPC?") == "1"
    with closing(Client(served.ports["meter"])) as other:
        assert other.ask(":SYST:ERR?").startswith("-113")


@pytest.mark.parametrize("pieces", [1, 3])
def test_an_endless_line_is_dropped(meter: Client, pieces: int) -> None:
    long = b"*CLS;" * (LONGEST_MESSAGE // 5 + 1)
    meter.send(long * pieces)
    meter.send(b"\n")
    answer = meter.ask(":SYST:ERR?;:SYST:ERR?")
    assert answer == '-363,"Input buffer overrun";0,"No error"'


def test_a_peer_that_leaves_in_the_middle_of_a_message(served: Servers, meter: Client) -> None:
    with closing(Client(served.ports["meter"])) as other:
        other.send("*ID")
        other.socket.shutdown(socket.SHUT_WR)
        assert other.stream.read() == b""
    assert meter.ask(":SYST:ERR?") == '-420,"Query UNTERMINATED"'


def test_late_answer(control: Client, meter: Client) -> None:
    fault(control, "late-answer:meter", 0.2)
    meter.send("*IDN?\n")
    assert meter.silent(0.1)
    assert meter.stream.readline().startswith(b"Weir")
    assert meter.ask("*OPC?") == "1"
    fault(control, "late-answer:meter", 0.2)  # given again: strikes again
    meter.send("*OPC?\n")
    assert meter.silent(0.1)


def test_a_late_answer_does_not_hold_up_the_others(control: Client, meter: Client) -> None:
    fault(control, "late-answer:meter", 60)
    meter.send("*IDN?\n")
    assert control.ask(":SIM:TIME?")


def test_lost_answer(control: Client, meter: Client) -> None:
    fault(control, "lost-answer:meter", 2)
    meter.send("*IDN?\n*IDN?\n*OPC?\n")
    assert meter.stream.readline() == b"1\n"


def test_a_fault_waits_for_an_answer_to_strike(control: Client, meter: Client) -> None:
    fault(control, "lost-answer:meter")
    meter.send("*CLS\n*IDN?\n*OPC?\n")
    assert meter.stream.readline() == b"1\n"


def test_garbage_and_truncated(control: Client, meter: Client) -> None:
    fault(control, "garbage:meter")
    assert not meter.ask("*OPC?").isprintable()
    assert meter.ask("*OPC?") == "1"
    fault(control, "truncated:meter")
    meter.send("*IDN?\n")
    assert meter.ask("*OPC?") == "Weir,S21"  # half of one answer, then the next


def test_dropped_peer(served: Servers, control: Client, meter: Client) -> None:
    fault(control, "dropped-peer:meter")
    meter.send("*IDN?\n")
    assert meter.stream.read() == b""
    with closing(Client(served.ports["meter"])) as again:
        assert again.ask("*OPC?") == "1"


def test_refused_port(served: Servers, control: Client, meter: Client) -> None:
    fault(control, "refused-port:meter")
    assert meter.stream.read() == b""
    with pytest.raises(ConnectionRefusedError):
        Client(served.ports["meter"])
    assert control.ask(":SIM:FAUL:CLE;:SYST:ERR?") == '0,"No error"'
    with closing(Client(served.ports["meter"])) as again:
        assert again.ask("*OPC?") == "1"


def test_queue_error_and_wrong_identity(control: Client, meter: Client) -> None:
    fault(control, "queue-error:meter")
    answer = meter.ask(":CONF:VOLT:DC 1,(@101);:SYST:ERR?")
    assert answer == '-310,"System error;simulated fault"'
    assert meter.ask(":SYST:ERR?") == '0,"No error"'
    fault(control, "wrong-identity:meter")
    assert not meter.ask("*IDN?").startswith("Weir")
    assert not meter.ask("*IDN?").startswith("Weir")


def test_a_fault_begins_at_its_time(control: Client, meter: Client) -> None:
    control.send(':SIM:FAUL "lost-answer:meter",5\n')
    assert meter.ask("*OPC?") == "1"
    control.send(":SIM:TIME:ADV 5\n")
    assert control.ask("*OPC?") == "1"
    meter.send("*IDN?\n*OPC?\n")
    assert meter.stream.readline() == b"1\n"


def test_fault_names_are_patterns_over_instruments() -> None:
    assert all(name.endswith(":*") and text for name, text in INSTRUMENT_FAULTS.items())


def test_in_real_time_a_wait_does_not_hold_up_the_others() -> None:
    clock = RealTime(1.0)
    with (
        serve(bench_file(), FakeWorld(clock), pause=clock.elapse) as servers,
        closing(Client(servers.ports["meter"])) as meter,
        closing(Client(servers.ports["supply"])) as supply,
    ):
        meter.send(":SENS:VOLT:DC:NPLC 100,(@101);:READ? (@101)\n")  # two seconds
        assert supply.ask("*OPC?") == "1"
        assert meter.silent(0.01)
        clock.end()
        assert meter.stream.readline().endswith(b"\n")


def test_closing_ends_connections_and_threads() -> None:
    before = threading.active_count()
    servers = serve(bench_file(), FakeWorld())
    with closing(Client(servers.ports["meter"])) as client:
        client.ask("*OPC?")
        servers.close()
        assert client.stream.read() == b""
    with pytest.raises(ConnectionRefusedError):
        Client(servers.ports["meter"])
    assert threading.active_count() == before


def test_ports_may_be_numbered(served: Servers) -> None:
    taken = served.ports["meter"]
    with pytest.raises(OSError, match="in use"):
        serve(bench_file(), FakeWorld(), first_port=taken)


def test_speed_of_the_clock() -> None:
    clock = RealTime(1000.0)
    start = time.monotonic()
    clock.elapse(20.0)
    assert time.monotonic() - start >= 0.02
    assert clock.now() >= 20.0
