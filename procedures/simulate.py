"""`simulate`: the simulated bench in real time, for any VISA client."""

from __future__ import annotations

import sys
import threading
from contextlib import suppress
from pathlib import Path

from benchkit.errors import InputError, OperatorStopped
from benchkit.files import BenchFile, load
from instruments.simulated.plant import build_plant
from instruments.simulated.server import serve
from instruments.simulated.timebase import RealTime
from procedures.interrupts import Interrupts

FIRST_PORT = 50250
"""The same ports each time, while they are free, so that a client's files keep their meaning."""


def serve_bench(path: Path, speed: float) -> int:
    """Serve until Ctrl-C."""
    if not 0.01 <= speed <= 1000:
        raise InputError(f"--speed is {speed:g}: it must be between 0.01 and 1000")
    bench = load(BenchFile, path)
    if bench.simulated is None:
        raise InputError(f"{path}: has no [simulated] table, so there is nothing to serve")
    clock = RealTime(speed)
    plant = build_plant(bench, path, clock)
    try:
        servers = serve(bench, plant, pause=clock.elapse, first_port=FIRST_PORT)
    except OSError:  # another simulated bench is being served there: take any that are free
        servers = serve(bench, plant, pause=clock.elapse)
    stop = threading.Event()
    with servers, suppress(OperatorStopped), Interrupts().listening():
        for name, port in servers.ports.items():
            sys.stdout.write(f"{name:<14} TCPIP::127.0.0.1::{port}::SOCKET\n")
        sys.stdout.write(
            f"in real time, times {speed:g}; messages end in a line feed; Ctrl-C ends it\n"
        )
        sys.stdout.flush()
        stop.wait()
    return 0
