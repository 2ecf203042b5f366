"""TCP listeners on the loopback interface, one an instrument, and one for the control port.

Blocking sockets and a thread a connection: a query costs two switches and no event loop. One
lock covers the execution of a message; in real time it is let go while the bench waits.
"""

from __future__ import annotations

import contextlib
import socket
import threading
from collections.abc import Callable, Iterator
from types import TracebackType
from typing import Self

from benchkit.files.bench import BenchFile
from instruments.simulated.control import CONTROL, Control
from instruments.simulated.core import Core
from instruments.simulated.errors import ScpiError
from instruments.simulated.link_faults import Delivery, LinkFaults
from instruments.simulated.load import Load
from instruments.simulated.message import end_of_message
from instruments.simulated.meter import ScanMeter, SingleMeter
from instruments.simulated.scpi import Device
from instruments.simulated.supply_tables import ListSupply, PlainSupply, SelectSupply
from instruments.simulated.switch import SwitchUnit
from instruments.simulated.thermometer import Thermometer
from instruments.simulated.world import World

LOOPBACK = "127.0.0.1"
LONGEST_MESSAGE = 64 * 1024
POLL_S = 0.1
"""How often a listener looks whether it has to open, close or end."""

Maker = Callable[[Core, str, BenchFile], Device]
PERSONALITIES: dict[str, dict[str, Maker]] = {
    "supply": {
        "supply-plain": PlainSupply,
        "supply-list": ListSupply,
        "supply-select": SelectSupply,
    },
    "meter": {"meter-single": SingleMeter, "meter-scan": ScanMeter},
    "thermometer": {"thermometer-scan": Thermometer},
    "load": {"load-plain": Load},
    "switch": {"switch-plain": SwitchUnit},
}
"""By kind of instrument; the first of a kind serves dialects of the user's own."""


def personality(kind: str, dialect: str, *, scanning: bool = False) -> str:
    """Return the personality for a dialect: a shipped name, or one found in a file's stem.

    Any other dialect gets the plain one of its kind; a meter whose points have routes gets the
    scanner, since it cannot be spoken to without channels.
    """
    known = PERSONALITIES[kind]
    stem = dialect.replace("\\", "/").rsplit("/", 1)[-1].removesuffix(".toml")
    for name in known:
        if name in stem:
            return name
    return "meter-scan" if kind == "meter" and scanning else next(iter(known))


def build_devices(bench: BenchFile, core: Core) -> dict[str, Device]:
    """Return the instruments of the bench file, and "control"."""
    devices: dict[str, Device] = {}
    for name, table in bench.instruments.items():
        scanning = any(p.instrument == name and p.route for p in bench.points.values())
        chosen = personality(table.kind, table.dialect, scanning=scanning)
        devices[name] = PERSONALITIES[table.kind][chosen](core, name, bench)
    devices[CONTROL] = Control(core)
    return devices


class _Port:
    """The listener of one device, and its connections."""

    def __init__(self, core: Core, device: Device, port: int, after: Callable[[], None]) -> None:
        self._core = core
        self._device = device
        self._after = after
        self.faults = LinkFaults(core.world, device.name)
        core.rearmed.append(self.faults.rearm)
        self._ended = threading.Event()
        self._connections: set[socket.socket] = set()
        self._listener: socket.socket | None = self._listen(port)
        self.number: int = self._listener.getsockname()[1]
        self._threads: list[threading.Thread] = []
        self._accepting = threading.Thread(target=self._accept, daemon=True)
        self._accepting.start()

    @staticmethod
    def _listen(port: int) -> socket.socket:
        listener = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
        try:
            listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            listener.bind((LOOPBACK, port))
            listener.listen(8)
            listener.settimeout(POLL_S)
        except BaseException:
            listener.close()
            raise
        return listener

    def update(self) -> None:
        """Open or close the listener as the faults say; the caller holds the lock."""
        refused = self.faults.refused()
        if refused and self._listener is not None:
            _shut(self._listener)
            self._listener = None
            self._hang_up()
        elif not refused and self._listener is None and not self._ended.is_set():
            with contextlib.suppress(OSError):  # taken meanwhile: try again at the next look
                self._listener = self._listen(self.number)

    def close(self) -> None:
        """End the listener, the connections and their threads."""
        self._ended.set()
        with self._core.lock:
            if self._listener is not None:
                _shut(self._listener)
                self._listener = None
            self._hang_up()
        self._accepting.join(5)
        for thread in self._threads:
            thread.join(5)

    def _hang_up(self) -> None:
        for connection in tuple(self._connections):
            _shut(connection)

    def _accept(self) -> None:
        while not self._ended.is_set():
            with self._core.lock:
                self.update()
                listener = self._listener
            if listener is None:
                self._ended.wait(POLL_S)
                continue
            try:
                connection, _ = listener.accept()
            except TimeoutError:
                continue
            except OSError:  # closed meanwhile, by ``update`` or ``close``
                continue
            with self._core.lock:
                if self._ended.is_set() or self._listener is not listener:
                    connection.close()
                    continue
                self._connections.add(connection)
            thread = threading.Thread(target=self._converse, args=(connection,), daemon=True)
            self._threads = [old for old in self._threads if old.is_alive()] + [thread]
            thread.start()

    def _converse(self, connection: socket.socket) -> None:
        try:
            connection.settimeout(None)
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            for line in self._lines(connection):
                if not self._send(connection, self._exchange(line)):
                    return
        except OSError:  # the peer has gone, or was hung up on
            return
        finally:
            with self._core.lock:
                self._connections.discard(connection)
            _shut(connection)

    def _lines(self, connection: socket.socket) -> Iterator[bytes]:
        """Messages as they come; one longer than the input buffer is an error and is dropped."""
        received = bytearray()
        dropping = False
        while chunk := connection.recv(LONGEST_MESSAGE):
            received += chunk
            while (end := received.find(b"\n") if dropping else end_of_message(received)) >= 0:
                line = bytes(received[:end])
                del received[: end + 1]
                if dropping:
                    dropping = False
                elif end > LONGEST_MESSAGE:
                    self._report(ScpiError(-363))
                else:
                    yield line
            if len(received) > LONGEST_MESSAGE:
                if not dropping:
                    self._report(ScpiError(-363))
                dropping = True
                received.clear()
        if received.strip() and not self._ended.is_set():
            self._report(ScpiError(-420))

    def _report(self, error: ScpiError) -> None:
        with self._core.lock:
            self._device.report(error)

    def _exchange(self, line: bytes) -> Delivery:
        with self._device.turn, self._core.lock:
            error = self.faults.queue_error()
            if error is not None:
                self._device.report(error)
            answer = self._device.execute(line.decode("latin-1").removesuffix("\r"))
            delivery = self.faults.deliver(answer)
            self._after()
        return delivery

    def _send(self, connection: socket.socket, delivery: Delivery) -> bool:
        """Deliver a response; False when the connection is to be closed."""
        if delivery.delay_s:
            self._ended.wait(delivery.delay_s)
        if delivery.payload is not None:
            try:
                connection.sendall(delivery.payload)
            except OSError:
                if not self._ended.is_set():
                    self._report(ScpiError(-410))
                return False
        return not delivery.close


class Servers:
    """The simulated bench while it is served; ``ports`` gives the TCP port by instrument name."""

    def __init__(self, core: Core, devices: dict[str, Device], first_port: int) -> None:
        self._core = core
        self._ports: list[_Port] = []
        self.ports: dict[str, int] = {}
        try:
            for number, (name, device) in enumerate(devices.items()):
                wanted = first_port + number if first_port else 0
                port = _Port(core, device, wanted, self._update)
                self._ports.append(port)
                self.ports[name] = port.number
        except BaseException:
            self.close()
            raise

    def _update(self) -> None:
        for port in self._ports:
            port.update()

    def close(self) -> None:
        """End every listener and connection."""
        for port in self._ports:
            port.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


def serve(
    bench: BenchFile,
    world: World,
    *,
    pause: Callable[[float], None] | None = None,
    first_port: int = 0,
) -> Servers:
    """Serve a bench's instruments, simulated, on 127.0.0.1 until the result is closed.

    ``pause`` is given in real time only: a function that sleeps for so many seconds of bench time
    (``RealTime.elapse``); it is called without the lock, and the world is then asked to
    ``elapse(0)``, that is to catch up with its clock. ``first_port`` numbers the ports upwards in
    the order of the bench file, control last; 0 takes any that are free.

    Raises InputError for a bench that cannot be simulated, OSError when a port is taken.
    """
    simulated = bench.simulated
    seed, serial = (simulated.seed, simulated.serial) if simulated else (1, "SIM-1")
    core = Core(world, seed, serial, pause)
    return Servers(core, build_devices(bench, core), first_port)


def _shut(connection: socket.socket) -> None:
    """Close a socket so that a thread that waits in it wakes."""
    with contextlib.suppress(OSError):
        connection.shutdown(socket.SHUT_RDWR)
    connection.close()
