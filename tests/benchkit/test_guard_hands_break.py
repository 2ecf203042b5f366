"""Attempts to break the guard with relays, hands and signals."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import cast

import pytest

from benchkit.errors import (
    NotConfirmedOff,
    OperatorStopped,
    Refused,
)
from benchkit.guard import Guard
from benchkit.harness import DRAWING, REVERSED, Harness
from instruments.fixture import RelayFixture
from instruments.relays import PolarityRelay
from tests.stand_in import (
    World,
    guard_of,
)
from tests.two_sources import (
    LONE,
    STEP,
    Sourced,
    TwoSources,
    two,
)

# relays and hands together


@dataclass
class Hands:
    """A person who also does something else."""

    world: World
    declines: bool = False
    presses: bool = False
    asked: list[Harness] = field(default_factory=list)

    def place(self, serial: str, stage_path: Path, harness: Harness) -> None:
        del serial, stage_path, harness

    def arrange(self, harness: Harness) -> None:
        self.asked.append(harness)
        if self.presses:
            self.world.volts, self.world.on = 12.0, True
        if self.declines:
            raise OperatorStopped("half of it was done")

    def refit_fuse(self, name: str) -> None:
        del name


@dataclass
class Relay:
    """Notes whether it was moved with something on."""

    world: World
    hot: list[bool] = field(default_factory=list)

    def set(self, crossed: bool) -> None:
        del crossed
        self.hot.append(self.world.on)


def relayed(world: World, hands: Hands) -> tuple[Guard, RelayFixture, Relay]:
    relay = Relay(world)
    fixture = RelayFixture(hands, cast("PolarityRelay", relay), None)
    guard = guard_of(world)
    guard._leads.wiring = fixture
    guard.make_safe("at the start")
    fixture.place("1", Path("stage.toml"), DRAWING)
    relay.hot.clear()
    return guard, fixture, relay


def test_the_relay_is_not_moved_with_what_was_switched_on_meanwhile() -> None:
    world = World()
    guard, _, relay = relayed(world, Hands(world, presses=True))
    with pytest.raises((Refused, NotConfirmedOff)):
        guard.arrange(replace(REVERSED, guarded=()))
        guard.prove_polarity()
    assert not any(relay.hot)


def test_leads_that_were_half_moved_are_asked_for_again() -> None:
    world = World()
    hands = Hands(world, declines=True)
    guard, fixture, _ = relayed(world, hands)
    with pytest.raises(OperatorStopped):
        guard.arrange(replace(REVERSED, guarded=()))
    hands.declines = False
    fixture.arrange(DRAWING)
    assert len(hands.asked) == 2
    assert hands.asked[-1] == DRAWING


# signals


def test_a_signal_at_any_order_to_the_battery_leaves_nothing_on() -> None:
    @contextmanager
    def struck(number: int) -> Iterator[list[int]]:
        count = [0]
        true = Sourced._told

        def told(source: Sourced, what: str) -> None:
            true(source, what)
            count[0] += source.role == "battery" and not made_safe
            if count[0] == number and not made_safe:
                made_safe.append(1)
                raise KeyboardInterrupt

        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(Sourced, "_told", told)
            yield count

    for number in range(1, 40):
        made_safe: list[int] = []
        world = TwoSources()
        with struck(number):
            try:
                with two(world).energised(STEP) as live:
                    live.connect("battery")
                    live.wait(3.0)
                    live.disconnect("battery")
                    live.wait(1.0)
            except (KeyboardInterrupt, NotConfirmedOff):
                pass
        assert not world.any_on(), number


def test_a_signal_just_before_the_shield_of_a_trip_still_leaves_the_step_off() -> None:
    struck: list[int] = []

    @contextmanager
    def shield() -> Iterator[None]:
        if world.on and not struck:
            struck.append(1)
            raise KeyboardInterrupt
        yield

    world = World()
    with pytest.raises(KeyboardInterrupt):  # noqa: SIM117
        with guard_of(world, shield=shield).energised(replace(LONE, source="supply")) as live:
            world.tripped = True
            live.look()
    assert not world.on
