"""The simulated bench in a process of its own."""

from __future__ import annotations

import json
import socket
import subprocess
import sys
from pathlib import Path

import pytest

from benchkit.errors import InputError, LinkError
from instruments.simulated.child import PACKAGES, start_child
from tests.instruments.simulated_fake import BENCH

FAKE = "tests.instruments.simulated_fake"


@pytest.fixture
def bench_path(tmp_path: Path) -> Path:
    path = tmp_path / "bench.toml"
    path.write_text(BENCH, encoding="utf-8")
    return path


def ask(port: int, message: bytes) -> bytes:
    with socket.create_connection(("127.0.0.1", port), timeout=5) as client:
        client.sendall(message)
        return client.makefile("rb").readline()


def test_a_child_serves_until_it_is_closed(bench_path: Path) -> None:
    with start_child(bench_path, module=FAKE) as child:
        assert set(child.ports) == {"supply", "load", "meter", "thermometer", "control"}
        assert ask(child.ports["meter"], b"*IDN?\n") == b"Weir,S20,0,1.0\n"
        assert ask(child.ports["control"], b":SIM:TIME:ADV 3600;:SIM:TIME?\n").startswith(b"3600.")
    assert child.process.returncode == 0
    with pytest.raises(ConnectionRefusedError):
        ask(child.ports["meter"], b"*IDN?\n")


def test_a_child_ends_when_its_parent_is_killed(bench_path: Path) -> None:
    script = (
        "import sys, time, json; from pathlib import Path;"
        "from instruments.simulated.child import start_child;"
        f"child = start_child(Path(sys.argv[1]), module={FAKE!r});"
        "print(json.dumps(child.ports), flush=True); time.sleep(60)"
    )
    with subprocess.Popen(
        [sys.executable, "-c", script, str(bench_path)], cwd=PACKAGES, stdout=subprocess.PIPE
    ) as parent:
        assert parent.stdout is not None
        port = json.loads(parent.stdout.readline())["meter"]
        with socket.create_connection(("127.0.0.1", port), timeout=10) as client:
            client.sendall(b"*OPC?\n")
            stream = client.makefile("rb")
            assert stream.readline() == b"1\n"
            parent.kill()
            assert stream.read() == b""  # the child has hung up


def test_a_bench_file_that_cannot_be_used(bench_path: Path) -> None:
    bench_path.write_text(BENCH.replace('kind = "load"', 'kind = "lode"'), encoding="utf-8")
    with pytest.raises(InputError, match=r"bench\.toml: .*kind is 'lode'"):
        start_child(bench_path, module=FAKE)


def test_a_child_that_cannot_start(bench_path: Path) -> None:
    with pytest.raises(LinkError, match=r"did not start .*No module named"):
        start_child(bench_path, module="instruments.simulated.nothing")


def test_a_child_imports_nothing_slow() -> None:
    script = (
        "import sys, instruments.simulated.__main__;"
        "slow = {'scipy', 'pandas', 'matplotlib', 'numpy', 'pyvisa'};"
        "print(sorted(slow & set(sys.modules)))"
    )
    done = subprocess.run(
        [sys.executable, "-c", script], cwd=PACKAGES, capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"
