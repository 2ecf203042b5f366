"""``python -m instruments.simulated BENCH [--virtual | --speed X]``: serves a simulated bench.

The first line on standard output is one JSON object: the TCP port by instrument name. With
``--virtual`` time jumps and the process ends when its standard input does, that is with the
process that started it; without, it serves in real time until it is interrupted.
"""

from __future__ import annotations

import argparse
import json
import sys
import threading
from collections.abc import Callable, Sequence
from pathlib import Path

from benchkit.errors import BenchkitError
from benchkit.files.bench import BenchFile
from benchkit.files.loading import load
from instruments.simulated.server import serve
from instruments.simulated.timebase import RealTime, Timebase, VirtualTime
from instruments.simulated.world import World

Builder = Callable[[BenchFile, Path, Timebase], World]


def main(arguments: Sequence[str] | None = None, build: Builder | None = None) -> int:
    """Serve until told to end; return the exit code. ``build`` stands in for the real plant."""
    parser = argparse.ArgumentParser(prog="python -m instruments.simulated")
    parser.add_argument("bench", type=Path)
    parser.add_argument("--virtual", action="store_true")
    parser.add_argument("--speed", type=float, default=1.0)
    options = parser.parse_args(arguments)
    if not options.speed > 0:
        parser.error("--speed must be more than 0")
    try:
        _serve(options.bench, None if options.virtual else RealTime(options.speed), build)
    except BenchkitError as error:
        print(error, file=sys.stderr)  # noqa: T201 - this is the program's own output
        return error.exit_code
    return 0


def _serve(path: Path, real_time: RealTime | None, build: Builder | None) -> None:
    bench = load(BenchFile, path)
    if build is None:
        from instruments.simulated.plant import build_plant

        build = build_plant
    world = build(bench, path, real_time or VirtualTime())
    with serve(bench, world, pause=real_time.elapse if real_time else None) as servers:
        print(json.dumps(servers.ports), flush=True)  # noqa: T201 - the contract with the parent
        if real_time is None:
            while sys.stdin.buffer.read(4096):
                pass
        else:
            try:
                threading.Event().wait()
            except KeyboardInterrupt:
                real_time.end()


if __name__ == "__main__":
    sys.exit(main())
