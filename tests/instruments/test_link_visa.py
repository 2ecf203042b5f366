"""The link over a VISA backend of another kind, where there is no socket to look at.

pyvisa-sim (MIT) is an instrument that nobody here wrote.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from instruments.errors import BadAnswer, CannotOpen, NoAnswer, PeerClosed
from instruments.link import Link
from instruments.session import Session
from tests.instruments.scripted import IMPATIENT

RESOURCE = "TCPIP0::localhost::inst0::INSTR"
INSTRUMENTS = """
spec: "1.1"
devices:
  supply:
    eom:
      TCPIP INSTR: {q: "\\n", r: "\\n"}
    delimiter: "|"
    error: ERROR
    dialogues:
      - {q: "*IDN?", r: "Orrin Works,T-100,0042,1.0"}
      - {q: ":SYST:ERR?", r: '0,"No error"'}
      - {q: ":READ?;:SYST:ERR?", r: '1.5;0,"No error"'}
      - {q: ":QUIET?"}
resources:
  TCPIP0::localhost::inst0::INSTR: {device: supply}
"""


@pytest.fixture
def backend(tmp_path: Path) -> str:
    path = tmp_path / "instruments.yaml"
    path.write_text(INSTRUMENTS, encoding="utf-8")
    return f"{path}@sim"


@pytest.fixture
def session(backend: str) -> Iterator[Session]:
    session = Session(Link("source", RESOURCE, backend=backend), IMPATIENT, "Orrin Works,T-100")
    session.open()
    yield session
    session.close()


def test_a_checked_reading(session: Session) -> None:
    assert session.ask_number(":READ?", unit="V") == 1.5
    assert session.ask_number(":READ?", unit="V") == 1.5


def test_an_answer_that_is_none_ends_the_step(session: Session) -> None:
    with pytest.raises(BadAnswer, match="'ERROR' is not an error-queue entry"):
        session.ask(":NOTHING?")
    assert session.out_of_step


def test_silence_is_no_answer(backend: str) -> None:
    link = Link("source", RESOURCE, backend=backend)
    link.open(1.0)
    with pytest.raises(NoAnswer) as caught:
        link.query(":QUIET?", 0.05)
    assert caught.value.command == ":QUIET?"
    link.close()


def test_an_unknown_backend_cannot_be_opened() -> None:
    with pytest.raises(CannotOpen):
        Link("source", RESOURCE, backend="@none").open(1.0)


def test_a_closed_link(session: Session) -> None:
    session.close()
    with pytest.raises(PeerClosed):
        session.ask(":READ?")
