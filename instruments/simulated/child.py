"""Runs the simulated bench in a process of its own, so that server and client do not share one
interpreter lock, and a run killed outright leaves instruments that go on as real ones would."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
import threading
from pathlib import Path
from types import TracebackType
from typing import IO, Self

from benchkit.errors import InputError, LinkError

START_S = 30.0
END_S = 5.0
PACKAGES = Path(__file__).resolve().parents[2]
"""The directory that holds the package, which need not be installed or the current one."""


class ChildBench:
    """A served bench in a child process; ``ports`` gives the TCP port by instrument name."""

    def __init__(self, process: subprocess.Popen[bytes], ports: dict[str, int]) -> None:
        self.process = process
        self.ports = ports

    def close(self) -> None:
        """End the child: first by the end of its input, by force if it does not listen."""
        _end(self.process)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


def start_child(bench_path: Path, *, module: str = "instruments.simulated") -> ChildBench:
    """Serve the bench file, with a virtual clock, in a child process.

    The child is in a session of its own: a Ctrl-C meant for this process does not take the
    instruments away before the outputs could be switched off. It ends with this process, since
    its standard input does. ``module`` is what is run, for tests.

    Raises InputError for a bench file that cannot be used (the child's own sentence), LinkError
    when the child does not say its ports.
    """
    environment = dict(os.environ)
    paths = [str(PACKAGES), environment.get("PYTHONPATH", "")]
    environment["PYTHONPATH"] = os.pathsep.join(path for path in paths if path)
    with tempfile.TemporaryFile() as complaints:
        process = subprocess.Popen(
            [sys.executable, "-m", module, str(bench_path.resolve()), "--virtual"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=complaints,
            env=environment,
            start_new_session=True,
        )
        try:
            line = _first_line(process)
            ports = {str(name): int(port) for name, port in json.loads(line).items()}
        except BaseException as problem:
            _end(process)
            if not isinstance(problem, ValueError):
                raise
            complaints.seek(0)
            text = complaints.read().decode("utf-8", "replace").strip()
            if process.returncode == InputError.exit_code and text:
                raise InputError(text) from None
            raise LinkError(
                f"the simulated bench of {bench_path} did not start within {START_S:g} s "
                f"(exit code {process.returncode}): {text or 'it said nothing'}"
            ) from None
    return ChildBench(process, ports)


def _first_line(process: subprocess.Popen[bytes]) -> bytes:
    """What the child says first; empty when it ends or takes too long."""
    assert process.stdout is not None
    said: list[bytes] = []
    reader = threading.Thread(target=_read_line, args=(process.stdout, said), daemon=True)
    reader.start()
    reader.join(START_S)
    return said[0] if said else b""


def _read_line(stream: IO[bytes], said: list[bytes]) -> None:
    said.append(stream.readline())


def _end(process: subprocess.Popen[bytes]) -> None:
    if process.stdin is not None:
        process.stdin.close()
    try:
        process.wait(END_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()
    if process.stdout is not None:
        process.stdout.close()
