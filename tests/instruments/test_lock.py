"""One process a bench, by a lock that survives a crash."""

import subprocess
import sys
from pathlib import Path

import pytest

from benchkit.errors import InputError
from instruments.lock import bench_lock

ROOT = Path(__file__).parents[2]
HOLD = (
    "import sys, time\n"
    "from instruments.lock import bench_lock\n"
    "with bench_lock(sys.argv[1]):\n"
    "    print('held', flush=True)\n"
    "    time.sleep(60)\n"
)


def test_a_second_process_is_refused_and_a_killed_one_lets_go(tmp_path: Path) -> None:
    resource = f"TCPIP::127.0.0.1::{tmp_path}::SOCKET"
    with subprocess.Popen(
        [sys.executable, "-c", HOLD, resource], cwd=ROOT, stdout=subprocess.PIPE, text=True
    ) as other:
        assert other.stdout is not None
        assert other.stdout.readline() == "held\n"
        with (
            pytest.raises(InputError, match=f"in use by another benchkit \\(process {other.pid}"),
            bench_lock(resource),
        ):
            pass
        with bench_lock(resource + "2"):
            pass
        other.kill()
    with bench_lock(resource):
        pass


def test_the_lock_is_let_go_after_an_error() -> None:
    resource = "TCPIP::127.0.0.1::lock-test::SOCKET"
    for _ in range(2):
        with pytest.raises(ZeroDivisionError), bench_lock(resource):
            raise ZeroDivisionError
