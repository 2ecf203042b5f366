"""A small scripted TCP peer: an instrument that remembers what it was set to, and faults.

It knows no SCPI beyond splitting a message at ';' and keeping values by header, so that the link,
the session and the adapters are tested against something that shares no code with the simulated
bench.
"""

from __future__ import annotations

import contextlib
import socket
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

from instruments.dialects import Timing
from instruments.link import Link
from instruments.session import Session

IDENTITY = "Orrin Works,T-100,0042,1.0"
NO_ERROR = '0,"No error"'

TIMING = Timing(
    terminator="\n",
    open_s=2.0,
    identify_s=2.0,
    set_s=2.0,
    read_s=2.0,
    slow_s=2.0,
    gap_s=0.0,
    recover="reopen",
    error_query=":SYST:ERR?",
)
IMPATIENT = TIMING.model_copy(update={"read_s": 0.05, "set_s": 0.3, "identify_s": 0.3})


@dataclass
class Instrument:
    """Keeps ':HEADER value[,(@channel)]' and answers ':HEADER? [(@channel)]' with it."""

    answers: dict[str, str] = field(default_factory=dict)
    identity: str = IDENTITY
    errors: list[str] = field(default_factory=list)
    values: dict[tuple[str, str], str] = field(default_factory=dict)
    selected: str = ""
    rejects: dict[str, str] = field(default_factory=dict)

    def message(self, text: str) -> str | None:
        """All answers of one program message, joined; None when it asks for nothing."""
        answers = [a for a in map(self.unit, text.split(";")) if a is not None]
        return ";".join(answers) if answers else None

    def unit(self, unit: str) -> str | None:
        header, _, rest = unit.partition(" ")
        value, _, channel = rest.partition("(@")
        channel = channel.removesuffix(")") or self.selected
        value = value.rstrip(",")
        if header in self.rejects:
            self.errors.append(self.rejects[header])
            return None
        match header:
            case "*IDN?":
                return self.identity
            case "*CLS":
                self.errors.clear()
                return None
            case ":SYST:ERR?":
                return self.errors.pop(0) if self.errors else NO_ERROR
            case ":INST:NSEL":
                self.selected = value
                return None
        if header.endswith("?"):
            key = (header[:-1], channel)
            return self.answers.get(header, self.values.get(key, "0"))
        self.values[header, channel] = {"ON": "1", "OFF": "0"}.get(value, value)
        return None


@dataclass
class Fault:
    """What happens to the answer of the next message that contains ``at``; then it is spent."""

    at: str
    raw: bytes | None = None
    delay_s: float = 0.0
    lost: bool = False
    hangs_up: bool = False


class Peer:
    """Serves one instrument on a loopback port; a new connection takes the place of the old.

    A delayed answer goes to whichever connection is there when it is due, as through a gateway.
    """

    def __init__(self, message: Callable[[str], str | None], end: bytes = b"\n") -> None:
        self.message = message
        self.end = end
        self.messages: list[str] = []
        self.faults: list[Fault] = []
        self.connections = 0
        self.late_sent = threading.Event()
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.resource = f"TCPIP::127.0.0.1::{self._listener.getsockname()[1]}::SOCKET"
        self._current: socket.socket | None = None
        self._threads: list[threading.Thread] = []
        self._start(self._accept)

    def say(self, raw: bytes) -> None:
        """Send bytes that nobody asked for."""
        if self._current is not None:
            with contextlib.suppress(OSError):
                self._current.sendall(raw)

    def hang_up(self) -> None:
        if self._current is not None:
            with contextlib.suppress(OSError):
                self._current.shutdown(socket.SHUT_RDWR)

    def refuse(self) -> None:
        """Take no further connection; the one there is goes on."""
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()

    def close(self) -> None:
        self.refuse()
        self.hang_up()
        for thread in self._threads:
            thread.join(5)

    def _start(self, work: Callable[..., None], *arguments: object) -> None:
        thread = threading.Thread(target=work, args=arguments, daemon=True)
        self._threads.append(thread)
        thread.start()

    def _accept(self) -> None:
        while True:
            try:
                connection, _ = self._listener.accept()
            except OSError:
                return
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self.connections += 1
            self._current = connection
            self._start(self._serve, connection)

    def _serve(self, connection: socket.socket) -> None:
        with connection, contextlib.suppress(OSError):
            pending = b""
            while received := connection.recv(4096):
                pending += received
                while self.end in pending:
                    line, _, pending = pending.partition(self.end)
                    self._answer(line.decode("ascii"))

    def _answer(self, text: str) -> None:
        self.messages.append(text)
        answer = self.message(text)
        raw = None if answer is None else answer.encode("latin-1") + self.end
        fault = next((f for f in self.faults if f.at in text), None)
        if fault is not None:
            self.faults.remove(fault)
            raw = None if fault.lost else raw if fault.raw is None else fault.raw
            if fault.delay_s and raw is not None:
                self._start(self._say_later, fault.delay_s, raw)
                return
        if raw is not None:
            self.say(raw)
        if fault is not None and fault.hangs_up:
            self.hang_up()

    def _say_later(self, delay_s: float, raw: bytes) -> None:
        threading.Event().wait(delay_s)
        self.say(raw)
        self.late_sent.set()


@contextlib.contextmanager
def serving(message: Callable[[str], str | None], end: bytes = b"\n") -> Iterator[Peer]:
    peer = Peer(message, end)
    try:
        yield peer
    finally:
        peer.close()


@contextlib.contextmanager
def session_with(
    peer: Peer, timing: Timing = TIMING, identity: str = "Orrin Works,T-100", role: str = "meter"
) -> Iterator[Session]:
    """An open session with the peer; its traffic is not recorded."""
    session = Session(Link(role, peer.resource, terminator=timing.terminator), timing, identity)
    try:
        session.open()
        yield session
    finally:
        session.close()


def free_port() -> int:
    """A loopback port on which nothing listens."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])
