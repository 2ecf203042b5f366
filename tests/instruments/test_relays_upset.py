"""The polarity relay with contacts that stop doing as told at any moment, over a scripted peer."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import pytest

from instruments.errors import NoAnswer, NotConfirmed
from instruments.relays import PolarityRelay
from instruments.switch import ScpiSwitch
from tests.instruments.scripted import Fault, Instrument, serving, session_with
from tests.instruments.test_adapters_switch import CROSSED, DIALECT, STRAIGHT, TIMES, Log


@dataclass
class Coils:
    """Two relays, and what upsets them: it is given every message before they are."""

    instrument: Instrument = field(default_factory=Instrument)
    closed: dict[str, bool] = field(default_factory=lambda: {STRAIGHT: False, CROSSED: False})
    upset: Callable[[str], object] = len

    def message(self, text: str) -> str | None:
        self.upset(text)
        answers = []
        for unit in text.split(";"):
            header, _, rest = unit.partition(" ")
            route = rest.removeprefix("(@").removesuffix(")")
            if header in (":ROUT:CLOS", ":ROUT:OPEN"):
                self.closed[route] = header == ":ROUT:CLOS"
            elif header == ":ROUT:CLOS?":
                answers.append(str(int(self.closed[route])))
            elif (answer := self.instrument.unit(unit)) is not None:
                answers.append(answer)
        return ";".join(answers) if answers else None


def test_a_contact_that_falls_back_while_it_settles_is_seen() -> None:
    coils = Coils()

    @dataclass
    class Bouncing(Log):
        def sleep(self, seconds: float) -> float:
            coils.closed[STRAIGHT] = True
            return super().sleep(seconds)

    with serving(coils.message) as peer, session_with(peer, TIMES, role="switch") as session:
        relay = PolarityRelay(ScpiSwitch(session, DIALECT), STRAIGHT, CROSSED, Bouncing())
        with pytest.raises(NotConfirmed, match=r"asked for route 301 open, but it .* as closed"):
            relay.set(True)
        assert not any(text.startswith(":ROUT:CLOS (") for text in peer.messages)


def test_the_other_one_closing_as_well_is_seen_and_both_are_opened() -> None:
    coils = Coils()

    def weld(text: str) -> None:
        if text.startswith(f":ROUT:CLOS (@{CROSSED})"):
            coils.closed[STRAIGHT] = True

    coils.upset = weld
    with serving(coils.message) as peer, session_with(peer, TIMES, role="switch") as session:
        relay = PolarityRelay(ScpiSwitch(session, DIALECT), STRAIGHT, CROSSED, Log())
        with pytest.raises(NotConfirmed, match=r"asked for route 301 open, but it .* as closed"):
            relay.set(True)
    assert coils.closed == {STRAIGHT: False, CROSSED: False}


def test_a_lost_answer_while_closing_opens_both_again() -> None:
    coils = Coils()
    with serving(coils.message) as peer, session_with(peer, TIMES, role="switch") as session:
        switch = ScpiSwitch(session, DIALECT)
        peer.faults = [Fault(f":ROUT:CLOS (@{CROSSED})", lost=True)]
        with pytest.raises(NoAnswer):
            PolarityRelay(switch, STRAIGHT, CROSSED, Log()).set(True)
        assert coils.closed == {STRAIGHT: False, CROSSED: False}
        assert not session.out_of_step


def test_a_lost_answer_while_opening_does_not_keep_the_other_closed() -> None:
    coils = Coils(closed={STRAIGHT: True, CROSSED: True})
    with serving(coils.message) as peer, session_with(peer, TIMES, role="switch") as session:
        peer.faults = [Fault(f":ROUT:OPEN (@{STRAIGHT})", lost=True)]
        with pytest.raises(NoAnswer):
            PolarityRelay(ScpiSwitch(session, DIALECT), STRAIGHT, CROSSED, Log()).set(True)
    assert coils.closed == {STRAIGHT: False, CROSSED: False}
