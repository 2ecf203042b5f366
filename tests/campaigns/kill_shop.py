"""What the campaign ``kills`` needs around a bench: its files, its locks, and processes to kill."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import tempfile
from collections import deque
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from benchkit.errors import InputError
from instruments.lock import bench_lock
from procedures.starters import place_starters
from tests.campaigns.kill_runner import Errand

LONGEST_RUN_S = 60.0
PACKAGES = str(Path(__file__).resolve().parents[2])
STAGE = {
    r"currents_A = .*": "currents_A = [0.1, 0.3, 0.6, 1.0]",
    r"  \{ current_A = 3\.0, max_V = .*\n": "",
    r"current_A = 5\.0, max_V = 0\.146": "current_A = 1.0, max_V = 0.146",
    r"steps = 3 *": "steps = 2",
    r"dwell_s = 5\.0": "dwell_s = 0.2",
}
NO_SOAK = {
    r"(?ms)^\[soak\].*?\n\n": "",
    r"(?m)^case_max_C = .*\n": "",
    r"(?m)^junction_margin_min_K = .*\n": "",
}
SOAK = {r"(?m)^current_A = 5\.0": "current_A = 1.0"}


def _edit(path: Path, edits: dict[str, str], to: Path | None = None) -> None:
    text = path.read_text("utf-8")
    for pattern, new in edits.items():
        text, count = re.subn(pattern, new, text)
        assert count == 1, (path, pattern, count)
    (to or path).write_text(text, "utf-8")


class Workshop:
    """Files of one bench: as it is served here, and as the measuring process knows it."""

    def __init__(self, folder: Path, supply: str) -> None:
        self.folder = folder
        self.stage, self.soaked = folder / "stage.toml", folder / "stage-soak.toml"
        self.served, self.known = folder / "bench.toml", folder / "known.toml"
        place_starters(folder)
        _edit(self.stage, STAGE | SOAK, self.soaked)
        _edit(self.stage, STAGE | NO_SOAK)
        edits = {r"poll_s = 1\.0 ": "poll_s = 0.05 ", r"settle_s = 0\.05 ": "settle_s = 0.01 "}
        if supply != "supply-list":
            edits[r'dialect = "supply-list" '] = f'dialect = "{supply}" '
        if supply == "supply-plain":
            edits[r'channel = "1"\n'] = ""
        _edit(self.served, edits)

    def know(self, ports: dict[str, int]) -> str:
        """Write the bench file of the measuring process; the resource of its supply."""
        edits = {r"(?ms)^\[simulated\].*": ""}
        for name, port in ports.items():
            if name != "control":
                told = rf'\g<1>resource = "TCPIP::127.0.0.1::{port}::SOCKET"'
                edits[rf'(?s)(\[instruments\.{name}\].*?)resource = "simulated"'] = told
        # One edit would reach into the next table, were they not all made, in order.
        _edit(self.served, edits, self.known)
        return f"TCPIP::127.0.0.1::{ports['supply']}::SOCKET"


class Process:
    """A measuring process, started ahead of its errand, since its imports take a second."""

    def __init__(self) -> None:
        self._process = subprocess.Popen(
            [sys.executable, "-m", "tests.campaigns.kill_runner"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            env=os.environ | {"PYTHONPATH": PACKAGES, "TMPDIR": tempfile.gettempdir()},
        )
        self.kill = self._process.kill

    def go(self, errand: Errand) -> None:
        """Give it its errand."""
        assert self._process.stdin is not None
        self._process.stdin.write(errand.line())
        self._process.stdin.flush()

    def end(self) -> tuple[int, str, str]:
        """Exit code, standard output and standard error."""
        try:
            out, complaints = self._process.communicate(timeout=LONGEST_RUN_S)
        except subprocess.TimeoutExpired:
            self.kill()
            out, complaints = self._process.communicate()
        return self._process.returncode, out.decode(), complaints.decode()


class Processes:
    """Two of them ready at any time."""

    def __init__(self) -> None:
        self._ready: deque[Process] = deque()

    def __enter__(self) -> Processes:
        self._ready.extend((Process(), Process()))
        return self

    def __exit__(self, *_: object) -> None:
        for process in self._ready:
            process.kill()
            process.end()

    def next(self) -> Process:
        """One that has no errand yet."""
        self._ready.append(Process())
        return self._ready.popleft()


def held(resource: str) -> bool:
    """Whether some process holds the lock of a bench."""
    try:
        with bench_lock(resource):
            return False
    except InputError:
        return True


@contextmanager
def own_locks(folder: Path) -> Iterator[None]:
    """Locks of benches in a folder of their own, for this process and those it starts."""
    before, tempfile.tempdir = tempfile.tempdir, str(folder)
    try:
        yield
    finally:
        tempfile.tempdir = before
