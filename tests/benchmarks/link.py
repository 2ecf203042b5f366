"""What a checked reading costs, against a bare pyvisa query of the same message.

``python -m tests.benchmarks.link``: blocks of both kinds take turns on one socket, with the
server in a process of its own and the traffic log on. The last line is a JSON object: ``ratio``
is the median over the pairs of blocks, ``setting_round_trips`` the messages that one checked
setting took, counted at the server.

Two cores have to be free, or the ratio flatters: with one core for both processes the bare query
loses the work that it otherwise does while the server answers, and is the slower of the two
(measured: 1.09 to 1.13 with two free cores, 0.73 pinned to one).
"""

from __future__ import annotations

import json
import multiprocessing
import socket
import statistics
import tempfile
import time
from multiprocessing.connection import Connection
from pathlib import Path

import pyvisa

from instruments.dialects import MeterDialect, load_dialect
from instruments.link import Link
from instruments.session import Session

BLOCKS, BLOCK = 60, 200
QUERY = ":READ? (@101)"
IDENTITY = "Orrin Works,T-100,0042,1.0"
ANSWERS = {
    b"*IDN?": IDENTITY.encode(),
    b":SYST:ERR?": b'0,"No error"',
    f"{QUERY};:SYST:ERR?".encode(): b'1.234567E-01;0,"No error"',
}


def serve(pipe: Connection) -> None:
    """Answer one connection at a time; 'count' on the pipe asks for the number of messages."""
    with socket.create_server(("127.0.0.1", 0)) as listener:
        pipe.send(listener.getsockname()[1])
        connection, _ = listener.accept()
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        with connection:
            count = 0
            while line := connection.recv(4096):
                count += 1
                if line == b"count?\n":
                    connection.sendall(b"%d\n" % (count - 1))
                    count = 0
                    continue
                connection.sendall(ANSWERS.get(line.rstrip(), b'0,"No error"') + b"\n")


def main() -> None:
    """Measure and print."""
    here, there = multiprocessing.Pipe()
    server = multiprocessing.get_context("spawn").Process(target=serve, args=(there,), daemon=True)
    server.start()
    resource = f"TCPIP::127.0.0.1::{here.recv()}::SOCKET"
    with tempfile.TemporaryDirectory() as folder, (Path(folder) / "traffic.log").open("w") as log:

        def traffic(direction: str, text: str) -> None:
            log.write(f"{time.time():.6f} {direction} {text}\n")

        link = Link("meter", resource)
        dialect = load_dialect("meter-scan", MeterDialect)
        session = Session(link, dialect.link, "Orrin Works,T-100", traffic)
        session.open()
        # The very resource that the link holds: the same socket, the same VISA.
        (bare,) = pyvisa.ResourceManager("@py").list_opened_resources()
        assert isinstance(bare, pyvisa.resources.MessageBasedResource)
        message = f"{QUERY};:SYST:ERR?"
        ratios, ours, theirs = [], [], []
        for _ in range(BLOCKS):
            start = time.perf_counter()
            for _ in range(BLOCK):
                bare.query(message)
            middle = time.perf_counter()
            for _ in range(BLOCK):
                session.ask_number(QUERY, "read", "V")
            end = time.perf_counter()
            theirs.append((middle - start) / BLOCK)
            ours.append((end - middle) / BLOCK)
            ratios.append(ours[-1] / theirs[-1])
        link.query("count?", 1.0)
        session.set(":SOUR:VOLT 12")
        round_trips = int(link.query("count?", 1.0))
        session.close()
    server.join(5)
    result = {
        "ratio": round(statistics.median(ratios), 3),
        "setting_round_trips": round_trips,
        "checked_reading_us": round(statistics.median(ours) * 1e6, 1),
        "bare_query_us": round(statistics.median(theirs) * 1e6, 1),
    }
    print(json.dumps(result))


if __name__ == "__main__":
    main()
