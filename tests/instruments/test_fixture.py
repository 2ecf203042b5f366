"""Moving the leads: a person is told which goes where, the simulated bench gets a command."""

from __future__ import annotations

from contextlib import closing
from pathlib import Path

import pytest

from benchkit.errors import InputError, OperatorStopped
from benchkit.harness import DRAWING, REVERSED, Harness
from instruments.bench import CONTROL_IDENTITY, CONTROL_TIMING
from instruments.errors import InstrumentError
from instruments.fixture import Fixture, HandFixture, SimulatedFixture
from instruments.link import Link
from instruments.session import Session
from instruments.simulated.server import serve
from tests.instruments.simulated_fake import FakeWorld, bench_file


class Person:
    """Does what is asked, or does not."""

    def __init__(self, willing: bool) -> None:
        self.willing = willing
        self.asked: list[str] = []

    def acknowledge(self, caution: str) -> bool:
        raise AssertionError(caution)

    def instruct(self, text: str) -> bool:
        self.asked.append(text)
        return self.willing


def test_a_person_is_told_which_lead_goes_where() -> None:
    person = Person(willing=True)
    fixture: Fixture = HandFixture(person)
    fixture.arrange(REVERSED)
    (asked,) = person.asked
    assert asked.startswith("With everything off: connect plus of the supply to the exposed minus")
    assert "CROSSED, on purpose" in asked
    fixture.arrange(DRAWING)
    assert "CROSSED" not in person.asked[1]
    assert "plus of the load to the guarded plus terminal" in person.asked[1]


@pytest.mark.parametrize("what", ["arrange", "place"])
def test_a_person_who_declines_stops_the_run(what: str) -> None:
    fixture = HandFixture(Person(willing=False))
    with pytest.raises(OperatorStopped, match=r"not moved|not put in"):
        if what == "arrange":
            fixture.arrange(REVERSED)
        else:
            fixture.place("S-1", Path("stage.toml"), DRAWING)


def test_the_simulated_bench_is_wired_and_given_boards_by_command() -> None:
    world = FakeWorld()
    with serve(bench_file(), world) as servers:
        link = Link("control", f"TCPIP::127.0.0.1::{servers.ports['control']}::SOCKET")
        with closing(Session(link, CONTROL_TIMING, CONTROL_IDENTITY)) as session:
            session.open()
            fixture: Fixture = SimulatedFixture(session)
            for harness in (REVERSED, Harness((), ("load",)), DRAWING):
                fixture.arrange(harness)
                assert world.harness == harness
                exposed, guarded, crossed, _ = session.ask(":SIM:WIRE?").split(",")
                wanted = ["+".join(at) for at in (harness.exposed, harness.guarded)]
                assert [exposed, guarded] == [f'"{at}"' for at in wanted]
                assert crossed == str(int(harness.crossed))
            with pytest.raises(InstrumentError, match="the load cannot be at both ports"):
                fixture.arrange(Harness(("load",), ("load",)))
            fixture.place("S-1", Path("stage.toml"), DRAWING)
            assert world.inserted[-1][0] == "S-1"
            with pytest.raises(InputError, match="cannot build board S-2"):
                fixture.place("S-2", Path("stage.json"), DRAWING)
