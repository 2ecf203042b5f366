"""The VISA link: lines of text to and from one resource. The only module that imports pyvisa.

Every error of pyvisa, of its backends and of the operating system is translated here, once, into
the tree of ``instruments/errors.py``.

Over a plain TCP socket, pyvisa-py leaves four gaps that a bench meets every day, so for such a
resource pyvisa opens and closes, and the link moves the bytes over its socket itself:

- a refused port opens without a complaint, because the outcome of the connect is never asked for;
- TCP_NODELAY cannot be set through its attribute, so two writes in a row (an output-off and the
  read-back behind it) can stall for a delayed acknowledgement;
- a peer that closes is read from in a busy loop until the time is up, and looks like silence;
- the bytes that came before a timeout are lost, and a write has no timeout at all.
"""

from __future__ import annotations

import errno
import os
import select
import socket
import time
from typing import cast

import pyvisa
from pyvisa import rname
from pyvisa.constants import StatusCode
from pyvisa.errors import VisaIOError
from pyvisa.resources import MessageBasedResource

from instruments.errors import (
    BadAnswer,
    CannotOpen,
    ConnectionRefused,
    ExchangeError,
    NoAnswer,
    PeerClosed,
    TransportFault,
)

DEFAULT_VISA = "@py"
LONGEST_LINE = 1 << 20
CHUNK = 1 << 16

_BY_ERRNO: dict[int, type[ExchangeError]] = {
    errno.ECONNREFUSED: ConnectionRefused,
    errno.EPIPE: PeerClosed,
    errno.ECONNRESET: PeerClosed,
    errno.ECONNABORTED: PeerClosed,
    errno.ENOTCONN: PeerClosed,
    errno.ESHUTDOWN: PeerClosed,
    errno.EBADF: PeerClosed,
    errno.ETIMEDOUT: NoAnswer,
}
_BY_STATUS: dict[int, type[ExchangeError]] = {
    StatusCode.error_timeout: NoAnswer,
    StatusCode.error_connection_lost: PeerClosed,
    StatusCode.error_session_not_locked: PeerClosed,
    StatusCode.error_invalid_object: PeerClosed,
    StatusCode.error_resource_not_found: CannotOpen,
    StatusCode.error_invalid_resource_name: CannotOpen,
    StatusCode.error_resource_busy: CannotOpen,
}


class Link:
    """One VISA resource, opened late, that carries lines ending in ``terminator``.

    ``backend`` is what pyvisa calls the VISA library: '@py' (pyvisa-py), '@ivi' or the path of an
    installed one, or 'definitions.yaml@sim' (pyvisa-sim). All times are in seconds. Not safe to
    share between threads: the session above holds the lock.
    """

    def __init__(
        self, role: str, resource: str, *, terminator: str = "\n", backend: str = DEFAULT_VISA
    ) -> None:
        self.role = role
        self.resource = resource
        self.terminator = terminator
        self.backend = backend
        self._end = terminator.encode("latin-1")
        self._visa: MessageBasedResource | None = None
        self._socket: socket.socket | None = None
        self._pending = b""
        self._visa_timeout_s = -1.0
        self._socket_timeout_s = -1.0

    @property
    def surplus(self) -> bool:
        """True when bytes followed the line that was read last (plain sockets only)."""
        return self._pending != b""

    @property
    def is_open(self) -> bool:
        """True between ``open`` and ``close``; says nothing about the peer."""
        return self._visa is not None

    def open(self, timeout_s: float) -> None:
        """Connect; raises CannotOpen or ConnectionRefused. An open link is left as it is."""
        if self._visa is not None:
            return
        started = time.monotonic()
        try:
            self._check_host()
            # pyvisa-py takes 0 for ten seconds, so at least one millisecond is asked for.
            opened = pyvisa.ResourceManager(self.backend).open_resource(
                self.resource, open_timeout=max(1, round(timeout_s * 1000))
            )
            self._visa = cast(MessageBasedResource, opened)
            self._visa.read_termination = self.terminator
            self._visa.write_termination = self.terminator
            self._visa_timeout_s = -1.0
            self._socket = self._find_socket()
            if self._socket is not None:
                pending = self._socket.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
                if pending:
                    raise OSError(pending, os.strerror(pending))
                self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                # Bounds a write to a peer that takes nothing; a read sets its own.
                self._socket.settimeout(timeout_s)
                self._socket_timeout_s = timeout_s
        except Exception as fault:  # backends raise bare Exception when a connect fails
            self.close()
            kind = ConnectionRefused if _kind_of(fault) is ConnectionRefused else CannotOpen
            why = " ".join(str(fault).split()).rstrip(".")
            by = "" if self.backend == DEFAULT_VISA else f" by the VISA library {self.backend!r}"
            raise self._error(kind, f"cannot be opened{by}: {why}", started=started) from fault

    def close(self) -> None:
        """Close; never raises, because there is nothing left that could be done about it."""
        visa, self._visa, self._socket = self._visa, None, None
        self._pending = b""
        if visa is not None:
            try:
                visa.close()
            except Exception:  # noqa: BLE001  see above
                return

    def reopen(self, timeout_s: float) -> None:
        """Close and connect anew; raises as ``open`` does."""
        self.close()
        self.open(timeout_s)

    def clear(self) -> None:
        """VISA's device clear: drops what was received and, where the bus can, tells the peer."""
        visa = self._opened("")
        self._pending = b""
        try:
            visa.clear()
        except Exception as fault:
            raise self._translate(fault, "", time.monotonic()) from fault

    def write(self, text: str) -> None:
        """Send one message; the terminator is added here. Raises PeerClosed or TransportFault."""
        raw = text.encode("latin-1") + self._end
        try:
            if self._socket is None:
                self._opened(text).write_raw(raw)
            else:
                self._socket.sendall(raw)
        except ExchangeError:
            raise
        except Exception as fault:
            raise self._translate(fault, text, time.monotonic()) from fault

    def read(self, timeout_s: float, *, command: str = "") -> str:
        """The next line without its terminator; ``command`` is only named in errors.

        Raises NoAnswer (with the bytes that did come), PeerClosed, BadAnswer, TransportFault.
        """
        started = time.monotonic()
        try:
            if self._socket is None:
                raw = self._read_visa(self._opened(command), timeout_s)
            else:
                raw = self._read_socket(self._socket, timeout_s, started, command)
        except ExchangeError:
            raise
        except Exception as fault:
            raise self._translate(fault, command, started) from fault
        if not raw.endswith(self._end):
            problem = f"the line does not end in {self.terminator!r}, as the dialect says"
            raise self._error(BadAnswer, problem, command, started, raw)
        return raw[: -len(self._end)].decode("latin-1")

    def query(self, text: str, timeout_s: float) -> str:
        """``write`` and ``read``: the raw line that answers, whatever it says."""
        self.write(text)
        return self.read(timeout_s, command=text)

    def waiting(self) -> bool:
        """True when bytes that nobody has asked for are there (known for plain sockets only).

        A peer that has closed is no waiting answer: the next ``read`` will say so.
        """
        return self._pending != b"" or bool(self._glance())

    def gone(self) -> bool:
        """True when the link is not open, or the peer is known to have closed it."""
        return self._visa is None or self._glance() == b""

    def _glance(self) -> bytes | None:
        """The first byte that waits, without taking it; b'' for a closed peer, None for none."""
        if self._socket is None or not select.select([self._socket], [], [], 0)[0]:
            return None
        try:
            return self._socket.recv(1, socket.MSG_PEEK)
        except OSError:
            return b""

    def _opened(self, command: str) -> MessageBasedResource:
        if self._visa is None:
            raise self._error(PeerClosed, "the connection is not open", command)
        return self._visa

    def _check_host(self) -> None:
        # pyvisa-py leaks its socket when the name is unknown, so the name is looked up before.
        parsed = rname.parse_resource_name(self.resource)
        if self.backend == DEFAULT_VISA and isinstance(parsed, rname.TCPIPSocket):
            socket.getaddrinfo(parsed.host_address, int(parsed.port), socket.AF_INET)

    def _find_socket(self) -> socket.socket | None:
        visa = self._visa
        if visa is None or not isinstance(visa, pyvisa.resources.TCPIPSocket):
            return None
        session = getattr(visa.visalib, "sessions", {}).get(visa.session)
        found = getattr(session, "interface", None)
        return found if isinstance(found, socket.socket) else None

    def _read_socket(
        self, peer: socket.socket, timeout_s: float, started: float, command: str
    ) -> bytes:
        received, self._pending = self._pending, b""
        left = timeout_s
        while True:
            length = received.find(self._end[-1:]) + 1
            if length:
                self._pending = received[length:]
                return received[:length]
            if len(received) > LONGEST_LINE:
                problem = f"a line longer than {LONGEST_LINE} bytes"
                raise self._error(BadAnswer, problem, command, started, received)
            if left != self._socket_timeout_s:
                peer.settimeout(left)
                self._socket_timeout_s = left
            try:
                chunk = peer.recv(CHUNK)
            except TimeoutError as fault:
                problem = "the answer stopped short" if received else "no answer"
                raise self._error(NoAnswer, problem, command, started, received) from fault
            if not chunk:
                problem = "the peer closed the connection"
                raise self._error(PeerClosed, problem, command, started, received)
            received += chunk
            # Not 0, which would mean a socket that never waits.
            left = max(1e-3, started + timeout_s - time.monotonic())

    def _read_visa(self, visa: MessageBasedResource, timeout_s: float) -> bytes:
        if timeout_s != self._visa_timeout_s:
            visa.timeout = timeout_s * 1000
            self._visa_timeout_s = timeout_s
        return visa.read_raw()

    def _translate(self, fault: Exception, command: str, started: float) -> ExchangeError:
        kind = _kind_of(fault)
        problem = "no answer" if kind is NoAnswer else f"the link failed: {fault}"
        return self._error(kind, problem, command, started)

    def _error(
        self,
        kind: type[ExchangeError],
        problem: str,
        command: str = "",
        started: float | None = None,
        received: bytes = b"",
    ) -> ExchangeError:
        return kind(
            problem,
            role=self.role,
            resource=self.resource,
            command=command,
            waited_s=None if started is None else time.monotonic() - started,
            received=received,
        )


def _kind_of(fault: Exception) -> type[ExchangeError]:
    if isinstance(fault, VisaIOError):
        return _BY_STATUS.get(fault.error_code, TransportFault)
    if isinstance(fault, OSError):
        return _BY_ERRNO.get(fault.errno or 0, TransportFault)
    if isinstance(fault, pyvisa.errors.InvalidSession):
        return PeerClosed
    return TransportFault
