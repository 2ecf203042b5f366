"""The measuring process of the campaign ``kills``: one that may be killed at any moment.

    python -m tests.campaigns.kill_runner

It reads one line on standard input, an ``Errand`` as JSON, and measures one board as `verify` does
on a real bench: with the machine's own clock, the lock of the bench, and a person who is asked for
everything that hands do. That person is played here: what the sentences say is done to the bench
over a socket to its control port. The last line on standard output says how the run ended.
"""

from __future__ import annotations

import json
import re
import socket
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Self
from unittest.mock import patch

from benchkit.guard import Guard
from benchkit.harness import NAMES
from benchkit.reading import Reading
from instruments.bench import open_bench
from procedures.inputs import read_board
from procedures.screen import Screen
from procedures.verify import run_board

REACHING_IN, REACHED_IN = "*ESE 1", "*ESE 0"
"""Said to the control port, where it changes nothing, around the look at the ports before hands
reach in: the guard does not record that one, by design."""
REST_GAP_S = 0.02
"""Between readings at rest, where `verify` waits longer with nothing on."""
CALLED = {name: at for at, name in NAMES.items()}


@dataclass(frozen=True)
class Errand:
    """What to measure, and where."""

    bench: str
    stage: str
    serial: str
    folder: str
    control: int
    declines: bool = False
    """Whether the person does not put the board in, so that nothing is measured."""

    def line(self) -> bytes:
        """As it is sent."""
        return json.dumps(asdict(self)).encode() + b"\n"

    @classmethod
    def read(cls, line: str) -> Self:
        """As it came."""
        return cls(**json.loads(line))


class Hands:
    """A person who does exactly what is said, and knows nothing else."""

    def __init__(self, errand: Errand, control: socket.socket) -> None:
        self._errand, self._control = errand, control
        self._answers = control.makefile("r", encoding="latin-1")

    def tell(self, command: str) -> None:
        """One command to the control port, done when this returns."""
        self._control.sendall(f"{command};:SYST:ERR?\n".encode("latin-1"))
        answer = self._answers.readline()
        if not answer.startswith("0,"):
            raise RuntimeError(f"the bench did not do {command!r}: {answer!r}")

    def acknowledge(self, caution: str) -> bool:
        """Accept."""
        del caution
        return True

    def instruct(self, text: str) -> bool:
        """Put the board in, or the leads and the resistor where the sentence says."""
        if text.startswith(f"Put board {self._errand.serial} into the fixture"):
            if self._errand.declines:
                return False
            self.tell(f':SIM:INS "{self._errand.serial}","{self._errand.stage}"')
            return True
        ports: dict[str, list[str]] = {"exposed": [], "guarded": []}
        crossed = False
        for name, port, terminal in re.findall(
            r"connect plus of (.+?) to the (exposed|guarded) (plus|minus) terminal", text
        ):
            ports[port].append(CALLED[name])
            crossed = crossed or terminal == "minus"
        if not ports["exposed"] + ports["guarded"]:
            raise RuntimeError(f"what is to be done for {text!r}?")
        told = ",".join(f'"{"+".join(at)}"' for at in ports.values()) + f",{int(crossed)}"
        resistor = re.search(r"put a resistor of (\S+) ohm across the guarded port", text)
        self.tell(f":SIM:WIRE {told}" + (f",{resistor[1]}" if resistor else ""))
        return True


class Nowhere:
    """A journal for the time before the run."""

    def reading(self, step: str, reading: Reading) -> None:
        """Nowhere to go yet."""

    def event(self, kind: str, text: str, **facts: object) -> None:
        """Nowhere to go yet."""


def mark_unrecorded(guard: Guard, hands: Hands) -> None:
    """Have the bench told when the guard looks without recording."""
    look = guard.clear_for_hands

    def marked() -> None:
        hands.tell(REACHING_IN)
        look()
        hands.tell(REACHED_IN)

    guard.clear_for_hands = marked  # type: ignore[method-assign]


@contextmanager
def hands_of(errand: Errand) -> Iterator[Hands]:
    """The person, with a line to the bench."""
    with socket.create_connection(("127.0.0.1", errand.control), 10.0) as control:
        yield Hands(errand, control)


def measure(errand: Errand) -> dict[str, object]:
    """One board; how it ended."""
    inputs = read_board(Path(errand.stage), Path(errand.bench))
    assert not inputs.bench.is_simulated, "the clock and the lock are to be the real ones"
    with (
        patch("procedures.sweep.REST_GAP_S", REST_GAP_S),
        hands_of(errand) as hands,
        open_bench(inputs.bench, inputs.bench_path, hands, Nowhere()) as bench,
    ):
        mark_unrecorded(bench.guard, hands)
        done = run_board(bench, inputs.job, errand.serial, Path(errand.folder), Screen(quiet=True))
    findings = done.evaluation.result.findings
    return {"status": done.status, "error": str(done.error or ""), "findings": findings}


if __name__ == "__main__":
    print(json.dumps(measure(Errand.read(sys.stdin.readline()))), flush=True)
