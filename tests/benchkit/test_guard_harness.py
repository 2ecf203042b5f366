"""The wrong way round on purpose: never hot, and only after measurement has proved the leads."""

from __future__ import annotations

from dataclasses import replace

import pytest

from benchkit.errors import OperatorStopped, Refused, Tripped
from benchkit.guard import Envelope, Guard
from benchkit.harness import DRAWING, REVERSED, Harness
from tests.stand_in import Notes, StandInWiring, World, guard_of

TRIAL = Envelope("reverse trial", 12.0, 0.1, 13.7, 0.2, 90.0, 5.0, 60.0, may_limit=True)


def begun(world: World, notes: Notes | None = None) -> Guard:
    notes = notes if notes is not None else Notes()
    guard = guard_of(world, notes)
    guard.begin(notes)
    guard.make_safe("at the start")
    return guard


def test_nothing_is_energised_before_polarity_is_proved() -> None:
    world = World()
    guard = begun(world)
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass
    assert "on" not in world.said
    guard.prove_polarity()
    with guard.energised(TRIAL) as live:
        live.wait(1.0)


def test_every_rewiring_asks_for_a_new_proof() -> None:
    world, notes = World(), Notes()
    guard = begun(world, notes)
    guard.prove_polarity()
    guard.arrange(REVERSED)
    assert world.wired == [REVERSED]
    assert ("harness", REVERSED.sentence()) in notes.events
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass
    assert guard.prove_polarity()
    with guard.energised(TRIAL) as live:
        live.wait(3.0)
        assert guard.read("exposed_voltage").value == pytest.approx(-12.0)
        assert guard.read("guarded_voltage").value == 0.0
    guard.arrange(DRAWING)
    guard.prove_polarity()


def test_leads_that_were_not_crossed_are_found() -> None:
    world = World(crossing_stuck=True)
    guard = begun(world)
    guard.arrange(REVERSED)
    with pytest.raises(Refused, match="the leads are not crossed"):
        guard.prove_polarity()
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass


def test_a_stage_that_conducts_in_reverse_is_proved_by_its_current() -> None:
    world = World(conducts_reversed=True)
    guard = begun(world)
    guard.arrange(REVERSED)
    assert not guard.prove_polarity()


def test_no_lead_is_touched_while_anything_is_on_or_charged() -> None:
    world = World()
    guard = begun(world)
    guard.prove_polarity()
    with guard.energised(TRIAL), pytest.raises(Refused, match="no lead is touched while"):
        guard.arrange(REVERSED)
    world.residual_V = 0.8
    with pytest.raises(Refused, match="with everything off"):
        guard.arrange(REVERSED)
    world.residual_V = 0.0
    fresh = guard_of(World())
    with pytest.raises(Refused, match="before the outputs are confirmed off"):
        fresh.arrange(REVERSED)
    assert world.wired == []


def test_a_declined_rewiring_leaves_nothing_proved() -> None:
    class Declining(StandInWiring):
        def arrange(self, harness: Harness) -> None:
            raise OperatorStopped(f"declined: {harness.sentence()}")

    world = World()
    guard = begun(world)
    guard._leads.wiring = Declining(world)
    guard.prove_polarity()
    with pytest.raises(OperatorStopped):
        guard.arrange(REVERSED)
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass


def test_a_guarded_side_of_the_wrong_sign_trips() -> None:
    world = World()
    guard = begun(world)
    guard.placed(DRAWING)
    guard.arrange(REVERSED)
    guard.prove_polarity()
    with pytest.raises(Tripped, match=r"guarded_voltage is -12 V, below -0\.6 V"):  # noqa: SIM117
        with guard.energised(replace(TRIAL, may_limit=False)) as live:
            world.guarded_V = lambda: -12.0  # type: ignore[method-assign]
            live.wait(5.0)
    assert not world.on


def test_a_supply_that_says_another_voltage_than_the_meter_trips() -> None:
    world = World()
    guard = begun(world)
    guard.prove_polarity()
    with pytest.raises(Tripped, match="supply_voltage against exposed_voltage"):  # noqa: SIM117
        with guard.energised(TRIAL) as live:
            world.polarity = -1
            live.wait(5.0)


def test_a_case_that_warms_too_fast_trips_before_it_is_too_warm() -> None:
    world = World(heating_K_per_s=9.0)
    guard = guard_of(world)
    with pytest.raises(Tripped, match="rise of the case is 9 K/s, above 8 K/s"):  # noqa: SIM117
        with guard.energised(TRIAL) as live:
            live.wait(30.0)
    assert world.case_C < 50


def test_energy_trips() -> None:
    world = World(heating_K_per_s=0.01)
    guard = guard_of(world)
    lean = replace(TRIAL, current_limit_A=2.0, over_current_A=2.0, energy_max_J=50.0)
    with pytest.raises(Tripped, match="energy is 60 J, above 50 J"), guard.energised(lean) as live:
        live.draw(1.0)
        live.wait(30.0)


def test_a_sensor_that_does_not_move_trips() -> None:
    world = World()
    guard = guard_of(world)
    long = replace(TRIAL, current_limit_A=2.0, over_current_A=2.0, longest_s=1e4)
    with pytest.raises(Tripped, match="the case has not moved"), guard.energised(long) as live:
        live.draw(1.0)
        live.wait(2000.0)
    assert world.time_s < 305


def test_a_look_that_comes_too_late_trips() -> None:
    world = World()
    guard = guard_of(world)
    with pytest.raises(Tripped, match="time since the last look"), guard.energised(TRIAL) as live:
        live.wait(1.0)
        world.pass_time(10.0)  # the machine stood still
        live.wait(1.0)


def test_sentences_say_which_lead_goes_where() -> None:
    assert REVERSED.sentence() == (
        "connect plus of the supply to the exposed minus terminal and its minus to the exposed "
        "plus terminal (CROSSED, on purpose); connect plus of the load to the guarded plus "
        "terminal and its minus to the guarded minus terminal"
    )
    assert "leave the exposed port open" in Harness((), ("load",)).sentence()


def test_a_supply_that_trips_at_its_limit_proves_no_direction() -> None:
    """Some supplies know no over-current level of their own: they trip at the limit."""
    world = World(conducts_reversed=True, trips_at_limit=True)
    guard = begun(world)
    guard.arrange(REVERSED)
    assert not guard.prove_polarity()
    assert not world.on
    with pytest.raises(Refused, match="has not been proved"), guard.energised(TRIAL):
        pass
