"""The guard against anything that claims to be a supply: off is off, or it says that it is not."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from contextlib import contextmanager
from itertools import pairwise

import pytest

from benchkit.errors import (
    InputError,
    LinkError,
    NotConfirmedOff,
    OperatorStopped,
    Refused,
    Tripped,
)
from benchkit.guard import Ceilings, Envelope, Guard
from tests.stand_in import Notes, StandInOperator, World, guard_of

CEILINGS = Ceilings(voltage_max_V=30, current_max_A=10, power_max_W=200, case_max_C=110, poll_s=1)
STEP = Envelope.around(
    "test step", 12.0, 5.0, CEILINGS, case_max_C=90.0, loss_max_W=5.0, longest_s=100.0
)


def run(guard: Guard, seconds: float = 5.0, current_A: float = 3.0) -> None:
    with guard.energised(STEP) as live:
        live.draw(current_A)
        live.wait(seconds)


def test_protection_comes_before_on_and_off_comes_before_anything_else() -> None:
    world = World()
    run(guard_of(world))
    said = world.said
    assert said.index("protect") < said.index("on")
    # Neither level nor voltage may be in the other's way, whatever was set before.
    order = [said.index(x) for x in ("program 0 5.55", "protect", "program 12 5.55", "on")]
    assert order == sorted(order)
    after_on = said[said.index("on") :]
    off = after_on.index("off")
    assert "release" in after_on[off:]
    assert after_on[off - 1].startswith(("state", "draw"))
    assert not world.on


def test_the_guard_looks_at_least_every_polling_interval() -> None:
    world, notes = World(), Notes()
    run(guard_of(world, notes), seconds=20.0)
    looks = [r.time_s for step, r in notes.readings if r.point == "case"]
    assert max(b - a for a, b in pairwise(looks)) <= CEILINGS.poll_s + 1e-6


@pytest.mark.parametrize(
    ("trouble", "words"),
    [
        ({"tripped": True}, "own protection has tripped"),
        ({"sensor_lost": True}, "case gives no usable reading"),
        ({"case_C": 95.0}, "case is 95 C, above 90 C"),
        ({"load_A": 7.0}, "limits its current"),
    ],
)
def test_what_trips_and_how_it_is_said(trouble: dict[str, float], words: str) -> None:
    world, notes = World(), Notes()
    guard = guard_of(world, notes)
    with pytest.raises(Tripped, match=words), guard.energised(STEP) as live:
        for name, value in trouble.items():
            setattr(world, name, value)
        live.wait(3.0)
    assert not world.on
    assert notes.kinds()[-1] == "off"
    assert "trip" in notes.kinds()


def test_a_slow_rise_trips_within_one_polling_interval() -> None:
    world = World(heating_K_per_s=10.0)
    with pytest.raises(Tripped, match="case"):
        run(guard_of(world), seconds=60.0)
    assert world.case_C <= 90.0 + 10.0 * (CEILINGS.poll_s + 0.1)


def test_too_long_and_too_lossy_trip() -> None:
    world = World()
    with pytest.raises(Tripped, match="time is"):
        run(guard_of(world), seconds=200.0)
    world = World()
    with (
        pytest.raises(Tripped, match="loss is 6 W, above 5 W"),
        guard_of(world).energised(STEP) as live,
    ):
        live.check_loss(2.0, 3.0)
    assert not world.on


def test_output_that_goes_off_by_itself_trips() -> None:
    world = World()
    guard = guard_of(world)
    with pytest.raises(Tripped, match="went off by itself"), guard.energised(STEP) as live:
        world.on = False
        live.look()


def test_levels_that_do_not_read_back_are_refused_before_on() -> None:
    world = World(wrong_levels=True)
    with pytest.raises(Refused, match=r"over-voltage level reads back as 60 after 13.7"):
        run(guard_of(world))
    assert "on" not in world.said


class Whim(BaseException):
    """Not even an Exception."""


@pytest.mark.parametrize("error", [RuntimeError("x"), KeyboardInterrupt(), SystemExit(1), Whim()])
def test_whatever_ends_the_block_ends_off(error: BaseException) -> None:
    world = World()
    guard = guard_of(world)
    with pytest.raises(type(error)), guard.energised(STEP):
        raise error
    assert not world.on
    assert world.said[-1] == "release"


@pytest.mark.parametrize(
    ("trouble", "words"),
    [
        ({"stuck": True}, r"reads back as on.*and by the meter"),
        ({"stuck": True, "lying": True}, "exposed_voltage is still 12 V"),
        ({"deaf": True}, "no answer"),
        ({"meter_dead": True}, "connection closed"),
    ],
)
def test_off_that_cannot_be_confirmed_is_never_called_off(
    trouble: dict[str, bool], words: str
) -> None:
    world, notes = World(), Notes()
    guard = guard_of(world, notes)
    with pytest.raises(NotConfirmedOff, match=words) as caught, guard.energised(STEP):
        for name, value in trouble.items():
            setattr(world, name, value)
    assert caught.value.exit_code == 4
    assert "by hand" in str(caught.value)
    assert "off" in world.said
    assert "off" not in notes.kinds()


def test_error_on_the_way_out_is_replaced_when_off_is_not_confirmed() -> None:
    world = World()
    guard = guard_of(world)
    with pytest.raises(NotConfirmedOff, match="after: it broke"), guard.energised(STEP):
        world.stuck = True
        raise LinkError("it broke")


def test_switching_off_is_shielded_from_signals() -> None:
    inside: list[str] = []
    world = World()

    @contextmanager
    def shield() -> Iterator[None]:
        inside.append("in")
        before = len(world.said)
        yield
        inside.extend(world.said[before:])

    run(guard_of(world, shield=shield))
    assert inside[:2] == ["in", "off"]


def test_found_on_is_switched_off_and_said() -> None:
    world, notes = World(on=True, volts=12.0), Notes()
    guard_of(world, notes).permit()
    assert not world.on
    assert "found-on" in notes.kinds()


@pytest.mark.parametrize(
    ("world", "words"),
    [
        (World(residual_V=3.0), "exposed_voltage is 3 V with everything off"),
        (World(case_C=60.0), "60.0 C and ambient 25.0 C at rest"),
        (World(case_C=180.0), "case reads 180.0 C at rest, outside"),
        (World(sensor_lost=True), "case gives no usable reading"),
    ],
)
def test_missing_permissives(world: World, words: str) -> None:
    with pytest.raises(Refused, match=words):
        guard_of(world).permit()
    assert "on" not in world.said


def test_calibration_out_of_date_is_refused() -> None:
    guard = guard_of(World(), due=dt.date(2026, 11, 4))
    with pytest.raises(Refused, match=r"meter \(2026-11-04\)"):
        guard.permit()


def test_polarity_is_proved_at_a_volt() -> None:
    world = World()
    guard_of(world).prove_polarity()
    assert "program 1 0.05" in world.said
    world = World(polarity=-1)
    with pytest.raises(Refused, match="leads are crossed"):
        guard_of(world).prove_polarity()
    assert not world.on
    assert "program 12 5.55" not in world.said
    world = World(lead_off=True)
    with pytest.raises(Refused, match="a measuring lead is off"):
        guard_of(world).prove_polarity()


def test_a_declined_caution_energises_nothing() -> None:
    world = World()
    guard = guard_of(world, operator=StandInOperator(answer=False))
    with pytest.raises(OperatorStopped), guard.energised(STEP, "mind the heat"):
        pass
    assert "on" not in world.said


def test_no_step_may_pass_the_ceilings_of_the_bench() -> None:
    for volts, amps, words in (
        (28.0, 1.0, r"bench.voltage_max_V = 30"),
        (5.0, 9.9, r"bench.current_max_A = 10"),
        (25.0, 8.0, r"bench.power_max_W = 200"),
    ):
        with pytest.raises(InputError, match=words):
            Envelope.around(
                "s", volts, amps, CEILINGS, case_max_C=90.0, loss_max_W=5.0, longest_s=10.0
            )


def test_no_load_beyond_the_envelope() -> None:
    world = World()
    guard = guard_of(world)
    with pytest.raises(InputError, match="not inside its limit"), guard.energised(STEP) as live:
        live.draw(6.0)
    assert not world.on
