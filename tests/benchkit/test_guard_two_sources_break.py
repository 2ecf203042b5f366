"""Attempts to break the guard where it has two sources, and where hands and relays meet."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import pytest

from benchkit.errors import (
    BenchkitError,
    InputError,
    LinkError,
    NotConfirmedOff,
    Refused,
    Tripped,
)
from benchkit.guard import Burst, Envelope
from benchkit.harness import DRAWING, REVERSED
from benchkit.prediction.coordination import Coordination
from benchkit.reading import Reading
from tests.stand_in import (
    Notes,
    StandInClock,
    StandInOperator,
    StandInPoints,
    World,
    guard_of,
)
from tests.two_sources import (
    LONE,
    STEP,
    Output,
    TwoSources,
    Watched,
    two,
)

# what holds already


def test_both_go_on_in_turn_and_both_off() -> None:
    world = TwoSources()
    with two(world).energised(STEP) as live:
        live.wait(2.0)
        seen = [world.outputs["battery"].on]
        live.connect("battery")
        live.wait(3.0)
        seen.append(world.outputs["battery"].on)
    assert seen == [False, True]
    assert not world.any_on()


@pytest.mark.parametrize("broken", ["supply", "battery"])
@pytest.mark.parametrize("what", ["send off", "off"])
def test_a_source_that_does_not_answer_does_not_keep_the_other_on(broken: str, what: str) -> None:
    world = TwoSources()
    with pytest.raises(BenchkitError), two(world).energised(STEP) as live:
        live.connect("battery")
        world.outputs[broken].breaks[what] = LinkError(f"{broken}: no answer")
        raise LinkError("it broke")
    other = "battery" if broken == "supply" else "supply"
    assert not world.outputs[other].on


@pytest.mark.parametrize("what", ["on", "state", "off"])
def test_a_battery_that_fails_half_way_leaves_nothing_on(what: str) -> None:
    world = TwoSources()
    with pytest.raises(BenchkitError), two(world).energised(STEP) as live:
        if what != "on":
            live.connect("battery")
        world.outputs["battery"].breaks[what] = LinkError("battery: no answer")
        if what == "on":
            live.connect("battery")
        elif what == "off":
            live.disconnect("battery")
        live.wait(2.0)
    assert not world.any_on()


def test_a_battery_that_lies_about_off_is_found_by_the_meter() -> None:
    world = TwoSources()
    with pytest.raises(NotConfirmedOff, match="exposed_voltage"), two(world).energised(LONE):
        world.outputs["battery"].lying = True


def test_a_supply_at_the_guarded_port_that_lies_is_found_by_the_meter() -> None:
    world = TwoSources()
    with pytest.raises(NotConfirmedOff, match="guarded_voltage"), two(world).energised(STEP):
        world.outputs["supply"].lying = True


# ways through


@pytest.mark.parametrize("fault", [ValueError("file descriptor"), OSError("disk"), RuntimeError()])
def test_any_error_of_one_source_leaves_the_other_off(fault: Exception) -> None:
    world = TwoSources()
    with pytest.raises(Exception), two(world).energised(STEP) as live:  # noqa: B017, PT011
        live.connect("battery")
        world.outputs["supply"].breaks["send off"] = fault
        raise LinkError("it broke")
    assert not world.outputs["battery"].on


@pytest.mark.parametrize("what", ["connect", "draw"])
def test_a_handle_is_dead_with_its_step(what: str) -> None:
    world = TwoSources()
    guard = two(world)
    with guard.energised(STEP) as live:
        pass
    with pytest.raises(Refused):
        if what == "connect":
            live.connect("battery")
        else:
            live.draw(0.1)
    assert not world.any_on()
    assert world.load_A == 0.0
    assert guard.confirmed_off


def test_a_second_source_that_somebody_switches_on_trips() -> None:
    world = TwoSources()
    with pytest.raises(Tripped), two(world).energised(LONE) as live:
        live.wait(2.0)
        world.outputs["supply"].volts, world.outputs["supply"].on = 24.0, True
        live.wait(60.0)


def test_a_source_that_is_on_already_is_not_programmed_to_the_steps_voltage() -> None:
    world = TwoSources()
    world.outputs["battery"].volts, world.outputs["battery"].on = 0.2, True
    with pytest.raises((Refused, Tripped)), two(world).energised(STEP) as live:
        live.wait(5.0)  # the equipment alone, and a reversed battery beside it all the while


def test_a_battery_that_comes_back_after_it_was_disconnected_trips() -> None:
    world = TwoSources()
    with pytest.raises(Tripped), two(world).energised(STEP) as live:
        live.connect("battery")
        live.wait(1.0)
        live.disconnect("battery")
        live.wait(1.0)
        world.outputs["battery"].on = True
        live.wait(60.0)


def test_disconnecting_does_not_blind_the_guard() -> None:
    world = TwoSources()
    guard = two(world)
    began = 0.0
    on_s = 0.0
    with pytest.raises(BenchkitError), guard.energised(STEP) as live:
        live.connect("battery")
        live.wait(1.0)
        battery = world.outputs["battery"]
        battery.takes_s |= {"quick off": 1.0, "off": 60.0}  # opened again twice, a number asked for
        battery.breaks |= dict.fromkeys(("quick off", "off"), LinkError("battery: no answer"))
        began = world.time_s
        try:
            live.disconnect("battery")
        finally:
            on_s = world.time_s - began if world.outputs["supply"].on else 0.0
    assert on_s <= guard.blind_s


@pytest.mark.parametrize("when", ["caution", "programming"])
def test_a_loop_opened_before_switching_on_keeps_it_off(when: str) -> None:
    @dataclass
    class Opens(StandInOperator):
        def acknowledge(self, caution: str) -> bool:
            if when == "caution":
                loop.shut = False
            return super().acknowledge(caution)

    class OpensLoop(StandInPoints):
        def arm_burst(self, points: Sequence[tuple[str, float]], seconds: float) -> None:
            super().arm_burst(points, seconds)
            loop.shut = False

    loop, world = Watched(), World()
    guard = guard_of(world, operator=Opens())
    guard._interlock = loop
    if when == "programming":
        guard._points = OpensLoop(world)
    lone = replace(LONE, source="supply", burst=Burst((("exposed_current", 1.0),), 0.1))
    with pytest.raises((Refused, Tripped)), guard.energised(lone, "mind") as live:
        live.wait(1.0)
    assert "on" not in world.said


def test_fetching_a_burst_does_not_keep_the_output_on() -> None:
    class Slow(StandInPoints):
        on_s = 0.0

        def fetch_burst(self, began_s: float) -> list[Reading]:
            if self.world.on:
                Slow.on_s = 40.0
            self.world.pass_time(40.0)  # ten thousand readings over a serial line, or no answer
            return super().fetch_burst(began_s)

    world = World(reading_s=0.0013)
    guard = guard_of(world)
    guard._points = Slow(world)
    blow = replace(LONE, source="supply", burst=Burst((("exposed_current", 1.0),), 0.3))
    with guard.energised(blow) as live:
        live.burst()
    assert Slow.on_s <= guard.blind_s


def test_a_burst_that_nobody_fetches_does_not_shut_the_eyes_for_good() -> None:
    world = World(reading_s=0.0013)
    blow = replace(LONE, source="supply", burst=Burst((("exposed_current", 1.0),), 0.3))
    guard = guard_of(world)
    guard.placed(DRAWING)
    guard._leads.proved = True
    with pytest.raises(Tripped), guard.energised(blow) as live:
        world.guarded_V = lambda: -12.0  # type: ignore[method-assign]
        live.wait(60.0)


def test_waiting_with_a_burst_ends_whatever_the_time_rounds_to() -> None:
    class Counted(StandInClock):
        sleeps = 0

        def sleep(self, seconds: float) -> float:
            self.sleeps += 1
            if self.sleeps > 1000:
                raise OverflowError("sleeps without end")
            return super().sleep(seconds)

    world = World()
    guard = guard_of(world)
    guard._clock = Counted(world)
    blow = replace(LONE, source="supply", burst=Burst((("exposed_current", 1.0),), 0.3))
    with guard.energised(blow) as live:
        live.burst()  # 0.1 + 0.05 - 0.15 is 2.8e-17, and no clock goes on by that


COORDINATED = Coordination(
    clears_in_s=0.01, let_through_A2s=10.0, clamp_A2s=100.0, current_A=20.0, prospective_A=22.0,
    breaking_A=50.0, voltage_V=14.0, rated_voltage_V=32.0, surely_opens_A=10.0, working_A=2.0,
    working_allowed_A=3.0, nuisance_margin=1.5, coordinated=True, notes=(),
)  # fmt: skip


@pytest.mark.parametrize(
    ("limit_A", "volts"),
    [(4.0, 12.0), (7.0, 24.0)],
    ids=["below what it is sure to open at", "above the voltage it was judged for"],
)
def test_a_fuse_that_is_coordinated_at_another_current_permits_nothing(
    limit_A: float, volts: float
) -> None:
    world = World(conducts_reversed=True)
    guard = guard_of(world)
    guard._leads.harness = replace(REVERSED, guarded=())
    guard._leads.conducts = True
    guard.declare_fuse(COORDINATED)
    step = replace(
        LONE, source="supply", voltage_V=volts, over_voltage_V=1.1 * volts,
        current_limit_A=limit_A, over_current_A=1.1 * limit_A,
    )  # fmt: skip
    with pytest.raises(Refused), guard.energised(step):
        pass
    assert "on" not in world.said


def test_full_current_in_reverse_is_not_driven_past_a_load() -> None:
    """REVERSED has the load at the guarded port: it conducts backwards beside an open clamp."""
    world = World(conducts_reversed=True)
    guard = guard_of(world)
    guard.begin(Notes())
    guard.make_safe("at the start")
    guard.arrange(REVERSED)
    guard.declare_fuse(replace(COORDINATED, current_A=5.0, surely_opens_A=4.0))
    assert not guard.prove_polarity()
    step = replace(
        LONE, source="supply", current_limit_A=5.0, over_current_A=5.5, guarded_min_V=-2.0
    )
    with pytest.raises(Refused), guard.energised(step):
        pass


def test_another_board_needs_its_own_fuse() -> None:
    guard = guard_of(World())
    guard.declare_fuse(COORDINATED)
    guard._leads.conducts = True
    guard.placed(DRAWING)
    assert guard._leads.fuse is None
    assert not guard._leads.conducts


def test_a_shunt_whose_leads_are_crossed_does_not_switch_the_loss_trip_off() -> None:
    with (
        pytest.raises(Tripped, match="loss"),
        guard_of(World()).energised(replace(LONE, source="supply")) as live,
    ):
        live.check_loss(2.0, -30.0)


def test_a_guarded_port_that_is_fed_is_found_before_hands_go_in() -> None:
    """Left so by a process that was killed: nobody knows yet what is at which port."""
    world = TwoSources()
    world.outputs["supply"] = Output(on=True, volts=12.0, lying=True)
    guard = two(world, harness=DRAWING)
    with pytest.raises((NotConfirmedOff, Refused)):
        guard.start_off()


def test_a_current_that_a_coarse_range_cannot_tell_from_none_is_not_off() -> None:
    class Coarse(StandInPoints):
        def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
            true = super().read(point, time_s, quick=quick)
            if point == "exposed_current":
                return replace(true, value=-0.8, u=0.3, range=100.0)
            return true

    guard = guard_of(World())
    guard._points = Coarse(World())
    with pytest.raises(NotConfirmedOff, match="exposed_current"):
        guard.start_off()


@pytest.mark.parametrize("point", ["exposed_current", "guarded_voltage"])
def test_a_meter_of_its_own_is_brought_into_step_before_off_is_doubted(point: str) -> None:
    class Apart(StandInPoints):
        recovered: frozenset[str] = frozenset()

        def recover(self, point: str) -> None:
            self.recovered |= {point}

        def read(self, asked: str, time_s: float, *, quick: bool = False) -> Reading:
            if asked == point and asked not in self.recovered and not world.any_on():
                raise LinkError(f"the meter of {asked} is out of step")
            return super().read(asked, time_s, quick=quick)

    world = TwoSources()
    guard = two(world)
    guard._points = Apart(world)
    with pytest.raises(KeyboardInterrupt), guard.energised(STEP):
        raise KeyboardInterrupt  # while that meter was being read


@pytest.mark.parametrize("change", [{"voltage_V": -12.0}, {"current_limit_A": -5.0}])
def test_a_source_of_four_quadrants_is_not_programmed_backwards(change: dict[str, float]) -> None:
    world = World()
    step = replace(
        Envelope("backwards", 1.0, 0.05, 1.6, 0.05, 90.0, 1.0, 10.0),
        **change,  # type: ignore[arg-type]
    )
    with pytest.raises((InputError, Refused)), guard_of(world, proved=False).energised(step):
        pass
    assert "on" not in world.said


def test_a_new_fuse_asks_for_the_caution_again() -> None:
    world, notes = World(), Notes()
    guard = guard_of(world, notes)
    step = replace(LONE, source="supply")
    with guard.energised(step, "mind"):
        pass
    guard.refit_fuse("F1")
    guard._leads.proved = True
    with guard.energised(step, "mind"):
        pass
    assert notes.kinds().count("caution") == 2
