"""Attempts to break the guard: everything that may fail does so while something is energised."""

from __future__ import annotations

import errno
import math
from dataclasses import dataclass, field, replace
from itertools import pairwise

import pytest

from benchkit.errors import InputError, LinkError, NotConfirmedOff, Refused, Tripped
from benchkit.protocols import SupplyState
from benchkit.reading import Reading
from tests.benchkit.test_guard import STEP, run
from tests.stand_in import Notes, StandInSupply, World, guard_of

FULL = OSError(errno.ENOSPC, "No space left on device")


@dataclass
class FullDisk(Notes):
    """A journal that takes nothing any more from the first event of a kind on."""

    full_from: str = "trip"
    full: bool = field(default=False, init=False)

    def reading(self, step: str, reading: Reading) -> None:
        if self.full:
            raise FULL
        super().reading(step, reading)

    def event(self, kind: str, text: str, **facts: object) -> None:
        self.full = self.full or kind == self.full_from
        if self.full:
            raise FULL
        super().event(kind, text, **facts)


def hot(world: World) -> None:
    world.case_C = 95.0


# a journal or a screen that fails


@pytest.mark.parametrize("kind", ["on", "trip", "stopped", "off"])
def test_a_full_disk_does_not_keep_the_output_on(kind: str) -> None:
    world = World()
    guard = guard_of(world, FullDisk(full_from=kind))
    with pytest.raises(OSError, match="No space left"), guard.energised(STEP) as live:
        live.draw(3.0)
        live.wait(2.0)
        hot(world)
        live.wait(2.0)
    assert not world.on
    assert guard.confirmed_off
    assert world.said[-1] == "release"
    assert world.points_read[-3:] == ["exposed_voltage", "guarded_voltage", "exposed_current"]


def test_a_full_disk_is_told_though_the_step_ended_well() -> None:
    guard = guard_of(World(), FullDisk(full_from="off"))
    with pytest.raises(OSError, match="No space left"):
        run(guard)
    assert guard.confirmed_off


def test_a_full_disk_does_not_hide_an_output_that_stays_on() -> None:
    world = World()
    guard = guard_of(world, FullDisk(full_from="stopped"))
    with pytest.raises(NotConfirmedOff), guard.energised(STEP):
        world.stuck = True
        raise LinkError("it broke")
    assert not guard.confirmed_off


def test_a_dead_screen_does_not_keep_the_output_on() -> None:
    world = World()

    def watch(reading: Reading) -> None:
        if world.on or reading.point == "exposed_voltage":
            raise OSError(errno.EIO, "Input/output error")

    guard = guard_of(world, watcher=watch)
    with pytest.raises(OSError, match="Input/output"):
        run(guard)
    assert not world.on
    assert guard.confirmed_off
    assert world.said[-1] == "release"


# errors of a kind that nobody expects


@pytest.mark.parametrize("fault", [ValueError("bad"), ArithmeticError(), AssertionError("never")])
@pytest.mark.parametrize("where", ["off", "read exposed_voltage"])
def test_any_error_while_switching_off_is_a_doubt(where: str, fault: Exception) -> None:
    world, notes = World(), Notes()
    guard = guard_of(world, notes)
    with pytest.raises(NotConfirmedOff, match=type(fault).__name__), guard.energised(STEP):
        world.broken[where] = fault
    assert world.said[-1] == "release"
    assert notes.kinds()[-1] == "not-confirmed-off"


def test_any_error_of_the_load_is_told_and_off_is_off() -> None:
    world, notes = World(), Notes()
    guard = guard_of(world, notes)
    with guard.energised(STEP):
        world.broken["release"] = ValueError("no number")
    assert notes.kinds()[-2:] == ["load", "off"]
    assert guard.confirmed_off


# the load before the supply


def test_a_load_left_on_is_released_before_anything_is_energised() -> None:
    world = World(load_A=5.0)
    run(guard_of(world))
    assert world.said.index("release") < world.said.index("on")


def test_a_load_that_stays_on_keeps_the_supply_off() -> None:
    world = World(load_stuck=True, load_A=5.0)
    with pytest.raises(LinkError, match="load: input reads back as on"):
        run(guard_of(world))
    assert "on" not in world.said


def test_rest_does_not_take_the_long_way_of_a_release() -> None:
    world = World()
    with guard_of(world).energised(STEP) as live:
        live.draw(3.0)
        before = world.said.count("release")
        live.rest()
        assert world.said.count("release") == before
        assert world.load_A == 0.0


# how long the guard is blind


def looks(notes: Notes) -> list[float]:
    return [r.time_s for _, r in notes.readings if r.point == "supply_voltage"]


def test_slow_readings_do_not_add_up() -> None:
    """Each takes four seconds (a hundred power line cycles, twice): never two without a look."""
    world, notes = World(reading_s=4.0), Notes()
    guard = guard_of(world, notes, waits_s=12.0)
    with guard.energised(replace(STEP, longest_s=1e3)) as live:
        for _ in range(5):
            guard.read("drop")
            live.read("exposed_current")
            live.draw(1.0)
    seen = looks(notes)
    gaps = [b - a for a, b in pairwise(seen)]
    assert len(gaps) >= 5
    assert max(gaps) <= guard.blind_s


def test_sleeping_while_energised_is_watching() -> None:
    world, notes = World(heating_K_per_s=5.0), Notes()
    guard = guard_of(world, notes)
    with pytest.raises(Tripped, match="case"), guard.energised(STEP):
        guard.sleep(60.0)
    assert world.case_C < 90.0 + 5.0 * 1.1


def test_a_clock_set_back_does_not_blind_the_guard() -> None:
    world, notes = World(time_s=1e4), Notes()
    guard = guard_of(world, notes)
    with (
        pytest.raises(Tripped, match="the clock went back by 5e\\+03 s"),
        guard.energised(STEP) as live,
    ):
        live.wait(2.0)
        world.time_s -= 5e3
        live.read("drop")
    assert not world.on


def test_the_blind_time_is_stated_before_the_step() -> None:
    notes = Notes()
    guard = guard_of(World(), notes, waits_s=18.4)
    with guard.energised(STEP, "mind the heat"):
        pass
    caution = next(text for kind, text in notes.events if kind == "caution")
    assert caution.startswith("mind the heat")
    assert "blind for up to 20 s" in caution


def test_a_trip_of_the_supply_does_not_wait_for_the_thermometer() -> None:
    world = World()
    with pytest.raises(Tripped, match="own protection"), guard_of(world).energised(STEP) as live:
        world.tripped = True
        world.points_read.clear()
        live.look()
    assert set(world.points_read) == {"exposed_voltage", "guarded_voltage", "exposed_current"}


# nothing out of turn


def test_nothing_by_hand_and_no_second_step_while_energised() -> None:
    world = World()
    guard = guard_of(world)
    with guard.energised(STEP):
        with pytest.raises(Refused, match="while test step is energised"):
            guard.refit_fuse("F1")
        with pytest.raises(Refused, match="while test step is energised"), guard.energised(STEP):
            pass
        assert "off" not in world.said
    assert "off" in world.said
    guard.refit_fuse("F1")


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"voltage_V": 31.0}, "bench.voltage_max_V"),
        ({"voltage_V": math.nan}, "bench.voltage_max_V"),
        ({"over_voltage_V": 31.0}, "bench.voltage_max_V"),
        ({"current_limit_A": 11.0}, "bench.current_max_A"),
        ({"over_current_A": 11.0}, "bench.current_max_A"),
        ({"voltage_V": 28.0, "current_limit_A": 8.0}, "bench.power_max_W"),
        ({"case_max_C": 120.0}, "bench.case_max_C"),
    ],
)
def test_no_envelope_passes_the_bench_however_it_was_made(
    change: dict[str, float], words: str
) -> None:
    world = World()
    with pytest.raises(InputError, match=words), guard_of(world).energised(replace(STEP, **change)):  # type: ignore[arg-type]
        pass
    assert "on" not in world.said


@pytest.mark.parametrize("field_", ["voltage_V", "current_A"])
@pytest.mark.parametrize("value", [math.nan, -20.0])
def test_what_a_supply_cannot_mean_trips(
    field_: str, value: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    world = World()
    honest = StandInSupply.state

    def state(supply: StandInSupply) -> SupplyState:
        return replace(honest(supply), **{field_: value})  # type: ignore[arg-type]

    monkeypatch.setattr(StandInSupply, "state", state)
    with pytest.raises(Tripped, match="supply_"), guard_of(world).energised(STEP) as live:
        live.look()
    assert not world.on


# off from the beginning


def test_an_output_found_on_is_off_before_hands_go_in_and_is_told_by_the_run() -> None:
    world = World(on=True, volts=12.0)
    guard = guard_of(world)
    guard.start_off()
    assert not world.on
    assert guard.confirmed_off
    for expected in (["found-on"], []):
        notes = Notes()
        guard.begin(notes)
        assert notes.kinds() == expected


def test_a_port_that_something_feeds_is_not_off() -> None:
    with pytest.raises(NotConfirmedOff, match="exposed_voltage is still 3 V"):
        guard_of(World(residual_V=3.0)).start_off()


def test_off_is_confirmed_only_until_something_is_begun() -> None:
    guard = guard_of(World())
    guard.start_off()
    with guard.energised(STEP):
        assert not guard.confirmed_off
    assert guard.confirmed_off
