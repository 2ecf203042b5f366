"""Attacks on the guard with crossed leads, each of which was once a way through."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace

import pytest

from benchkit.errors import NotConfirmedOff, OperatorStopped, Refused, Tripped
from benchkit.harness import DRAWING, REVERSED, Harness
from benchkit.reading import Reading
from tests.benchkit.test_guard_harness import TRIAL, begun
from tests.stand_in import StandInPoints, StandInWiring, World, guard_of


class FloatingExposed(StandInPoints):
    """The leads of the exposed voltage are off: the meter floats near nothing."""

    def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
        true = super().read(point, time_s, quick=quick)
        return replace(true, value=0.0137) if point == "exposed_voltage" else true


@dataclass
class Blocked(World):
    """A charge at the exposed port, that a stage which blocks keeps from the guarded one."""

    def guarded_V(self) -> float:
        return 0.0


def test_no_lead_is_touched_when_only_the_drop_shows_the_charge() -> None:
    world = Blocked()
    guard = begun(world)
    guard.arrange(REVERSED)
    guard._points = FloatingExposed(world)
    world.residual_V = -12.0
    with pytest.raises(Refused):
        guard.arrange(DRAWING)


def test_no_lead_is_touched_with_a_supply_switched_on_since() -> None:
    world = World()
    guard = begun(world)
    world.volts, world.on = 0.3, True  # somebody pressed the supply's own key
    with pytest.raises((Refused, NotConfirmedOff)):
        guard.arrange(REVERSED)


def test_a_supply_that_lies_about_off_is_found_where_the_stage_conducts() -> None:
    world = World(conducts_reversed=True)
    guard = begun(world)
    guard.arrange(REVERSED)
    world.stuck = world.lying = True
    with pytest.raises(NotConfirmedOff):
        guard.prove_polarity()


@pytest.mark.parametrize("wrong", ["crossed", "lead off", "limits"])
def test_a_proof_that_fails_takes_back_the_one_before(wrong: str) -> None:
    world = World()
    guard = begun(world)
    guard.prove_polarity()
    world.polarity = -1 if wrong != "lead off" else 1
    world.lead_off, world.conducts_reversed = wrong == "lead off", wrong == "limits"
    with pytest.raises((Refused, Tripped)):
        guard.prove_polarity()
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass


def test_nothing_large_is_energised_before_begin() -> None:
    world = World(polarity=-1)
    with pytest.raises(Refused), guard_of(world, proved=False).energised(TRIAL):
        pass


def test_leads_that_nobody_put_back_are_remembered_as_crossed() -> None:
    class Declining(StandInWiring):
        def arrange(self, harness: Harness) -> None:
            if not harness.crossed:
                raise OperatorStopped("the leads were not moved")
            super().arrange(harness)

    world = World()
    guard = begun(world)
    guard._leads.wiring = Declining(world)
    guard.arrange(REVERSED)
    with pytest.raises(OperatorStopped):
        guard.arrange(DRAWING)
    assert guard.harness.crossed


def test_a_signal_just_before_the_shield_still_leaves_the_step_off() -> None:
    struck: list[int] = []

    @contextmanager
    def shield() -> Iterator[None]:
        if world.on and not struck:
            struck.append(1)
            raise KeyboardInterrupt
        yield

    world = World()
    guard = guard_of(world, shield=shield)
    with pytest.raises(KeyboardInterrupt), guard.energised(TRIAL):
        pass
    assert not world.on


def test_a_clock_set_back_does_not_lengthen_a_step() -> None:
    world = World(reading_s=0.001)
    guard = begun(world)
    guard.prove_polarity()
    passed = 0.0
    with pytest.raises(Tripped), guard.energised(TRIAL) as live:
        while passed < 200.0:
            live.wait(20.0)
            passed += 20.0
            world.time_s -= 20.0


def test_waiting_ends_whatever_the_time_rounds_to() -> None:
    class Counted(World):
        looks = 0

        def break_at(self, what: str) -> None:
            self.looks += what == "state"
            if what == "state" and self.looks > 1000:
                raise OverflowError("looks without end")

    world = Counted()
    guard = begun(world)
    guard.prove_polarity()
    with guard.energised(TRIAL) as live:
        live.wait(20.0)


@pytest.mark.parametrize("conducts", [False, True])
def test_leads_stuck_crossed_are_found(conducts: bool) -> None:
    world = World(conducts_reversed=conducts)
    guard = begun(world)
    guard.arrange(REVERSED)
    world.crossing_stuck = True
    guard.arrange(DRAWING)
    with pytest.raises((Refused, Tripped)):
        guard.prove_polarity()
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass
    assert not world.on


@pytest.mark.parametrize("trips", [False, True])
def test_leads_stuck_straight_prove_nothing_whatever_the_load_does(trips: bool) -> None:
    """A load that did not let go makes the supply limit: neither voltage nor current is right."""
    world = World(crossing_stuck=True, trips_at_limit=trips)
    guard = begun(world)
    guard.arrange(REVERSED)
    world.load_A, world.load_stuck = 3.0, True
    with pytest.raises(Exception):  # noqa: B017, PT011
        guard.prove_polarity()
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass


def test_a_current_that_overloads_its_range_is_not_off() -> None:
    class Overloaded(StandInPoints):
        def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
            true = super().read(point, time_s, quick=quick)
            return replace(true, status="overload") if point == "exposed_current" else true

    world = World()
    guard = begun(world)
    guard._points = Overloaded(world)
    with pytest.raises(NotConfirmedOff, match="exposed_current is still overload"):
        guard.make_safe("end")
