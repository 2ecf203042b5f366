"""A fuse of the simulated bench in time, against the closed forms of its law."""

from __future__ import annotations

import math
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from benchkit.harness import CHARGING, REVERSED
from benchkit.parts.fuse import FuseLaw
from instruments.simulated.melting import MeltingFuse
from tests.instruments.simulated_stage import VOLTS, Make, crossed, plant_with

LAW = FuseLaw(0.016, 0.4, 5.8, 1.2, 40.0)
STEPS = [0.5, 0.0137, 1e-3]


@pytest.fixture
def make(tmp_path: Path) -> Make:
    return partial(plant_with, tmp_path)


def cleared(fuse: MeltingFuse, current_A: float, step_s: float) -> float:
    for _ in range(1_000_000):
        fuse.pass_time(step_s, current_A)
        if fuse.is_open:
            return fuse.cleared_s
    raise AssertionError("it never opened")


@pytest.mark.parametrize("step_s", STEPS)
@pytest.mark.parametrize("current_A", [6.0, 10.0, -25.0, 300.0])
def test_it_clears_when_the_law_says_whatever_the_step(step_s: float, current_A: float) -> None:
    """t = -tau ln(1 - (I0/I)^2), and then the arcing I2t at the same current."""
    fuse = MeltingFuse(LAW)
    melts = -1.2 * math.log(1 - (5.8 / current_A) ** 2)
    seconds = melts + 40.0 / current_A**2
    assert cleared(fuse, current_A, step_s) == pytest.approx(seconds, rel=1e-9)
    assert melts == pytest.approx(float(LAW.time_to_melt_s(current_A)), rel=1e-9)
    assert fuse.onset_A2s == pytest.approx(current_A**2 * melts + 40.0, rel=1e-9)


def test_at_large_currents_it_lets_its_clearing_I2t_through() -> None:
    fuse = MeltingFuse(LAW)
    cleared(fuse, 5000.0, 1e-3)
    assert fuse.onset_A2s == pytest.approx(1.2 * 5.8**2 + 40.0, rel=1e-5)


@pytest.mark.parametrize("step_s", STEPS)
def test_a_warm_fuse_melts_sooner_and_a_rest_cools_it(step_s: float) -> None:
    """From the warmth theta: t = tau ln((x - theta) / (x - 1)) with x = (I/I0)^2; what it cools
    to is theta exp(-t/tau)."""
    fuse = MeltingFuse(LAW)
    for _ in range(round(30 / step_s)):
        fuse.pass_time(step_s, 5.0)
    warm = (5.0 / 5.8) ** 2
    assert fuse.warmth == pytest.approx(warm, rel=1e-6)
    rest = 40 * step_s
    for _ in range(40):
        fuse.pass_time(step_s, 0.0)
    warm *= math.exp(-rest / 1.2)
    assert fuse.warmth == pytest.approx(warm, rel=1e-6)
    x = (20 / 5.8) ** 2
    seconds = 1.2 * math.log((x - warm) / (x - 1)) + 40 / 400
    assert cleared(fuse, 20.0, step_s) == pytest.approx(seconds, rel=1e-6)


def test_it_carries_its_opening_current_for_ever_and_an_open_one_stays_open() -> None:
    fuse, states = MeltingFuse(LAW), []
    for seconds, amps in ((1e6, 5.8), (10, 60.0), (1e6, 0.0), (10, 60.0)):
        fuse.pass_time(seconds, amps)
        states.append((fuse.is_open, fuse.onset_A2s))
    assert states[0] == (False, 0.0)
    assert states[1:] == [(True, states[1][1])] * 3
    assert states[1][1] == pytest.approx(40.0, rel=1e-6)  # it was about to melt


def test_an_arc_goes_out_without_current() -> None:
    fuse = MeltingFuse(LAW)
    fuse.pass_time(float(LAW.time_to_melt_s(20.0)), 20.0)
    assert fuse.arc_A2s is not None
    states = [fuse.is_open]
    fuse.pass_time(1e-6, 0.01)
    assert [*states, fuse.is_open] == [False, True]


def blown(make: Make, limit: float, step_s: float) -> tuple[float, float, float]:
    """What a crossed supply does to a fused clamp: current, seconds, and I2t until it is off."""
    plant = make("fused-clamp")
    plant.wire(REVERSED)
    plant.command_supply("supply", VOLTS, limit, True)
    amps = 0.0
    for _ in range(round(20 / step_s)):
        plant.elapse(step_s)
        if plant.truth("fuse_open"):
            break
        amps = plant.supply_terminals("supply")[1] if step_s < 0.1 else limit
    volts, after, limits = plant.supply_terminals("supply")
    assert volts == pytest.approx(VOLTS, abs=1e-3)  # nothing holds it down any more
    assert abs(after) < 1e-3
    assert not limits
    assert abs(plant.voltage("guarded_voltage")) < 0.1
    assert plant.truth("part_dead") == 0
    return amps, plant.truth("fuse_cleared_s"), plant.truth("fuse_A2s")


def test_a_crossed_supply_blows_the_fuse_before_the_clamp(make: Make) -> None:
    """At five times the rated current. The board's own fuse is within the 30 % of its sheet."""
    found = [blown(make, 25.0, step) for step in (0.5, 0.02, 1e-3)]
    amps, seconds, let_through = found[-1]
    assert amps == pytest.approx(25.0, rel=1e-3)
    for other in found[:-1]:
        assert other[1:] == pytest.approx((seconds, let_through), rel=1e-6)
    opening = 5 * math.sqrt(1.35)  # between what UL 248-14 has it carry and open at
    tau, share = 40 / opening**2, (opening / 25.0) ** 2
    typical = -tau * math.log(1 - share) + 40 / 25.0**2
    assert 0.7 * typical < seconds < 1.3 * typical
    assert seconds != pytest.approx(typical, rel=1e-3)
    assert let_through == pytest.approx(25.0**2 * seconds, rel=1e-3)


def test_the_working_current_leaves_the_fuse_whole(make: Make) -> None:
    plant = make("fused-clamp")
    assert plant.harness == CHARGING
    plant.command_supply("supply", VOLTS, 6.0, True)
    plant.command_load("CURR", 5.0, True)
    plant.elapse(600)
    assert plant.truth("fuse_open") == 0
    assert math.isnan(plant.truth("fuse_cleared_s"))
    assert plant.truth("fuse_A2s") == 0
    assert plant.load_terminals()[1] == pytest.approx(5.0, rel=1e-3)
    plant.command_load("CURR", 8.0, True)
    plant.command_supply("supply", VOLTS, 9.0, True)
    plant.elapse(60)
    assert plant.truth("fuse_open") == 1
    assert abs(plant.load_terminals()[1]) < 1e-3


def test_a_load_that_melts_a_fuse_does_it_at_one_moment_whatever_the_step(make: Make) -> None:
    """Its current comes up over milliseconds, so the steps are the simulation's own there."""
    seconds = []
    for step in (0.5, 0.01, 1e-3):
        plant = make("fused-clamp")
        plant.command_supply("supply", VOLTS, 25.0, True)
        plant.elapse(0.5)
        plant.command_load("CURR", 20.0, True)
        for _ in range(round(2 / step)):
            plant.elapse(step)
        seconds.append(plant.truth("fuse_cleared_s"))
    assert np.ptp(seconds) < 2e-3 * seconds[0]


def test_the_same_board_has_the_same_fuse(make: Make) -> None:
    assert blown(make, 25.0, 0.5) == blown(make, 25.0, 0.5)


def test_the_smallest_overload_is_carried(make: Make) -> None:
    plant = crossed(make("fused-clamp"), limit=4.9)  # the standard has it carry the rated 5 A
    plant.elapse(60)
    assert plant.truth("fuse_open") == 0


def test_a_new_fuse_is_cold_and_carries(make: Make) -> None:
    plant = make("fused-clamp")
    plant.command_supply("supply", VOLTS, 9.0, True)
    plant.command_load("CURR", 8.0, True)
    plant.elapse(60)
    assert plant.truth("fuse_open") == 1
    first = plant.truth("fuse_cleared_s")
    plant.command_load("CURR", 0.0, False)
    plant.command_supply("supply", 0.0, 9.0, False)
    plant.elapse(1)
    plant.refit("F1")
    assert plant.truth("hot_rewirings") == 0
    assert plant.truth("fuse_open") == 0
    assert math.isnan(plant.truth("fuse_cleared_s"))
    plant.command_supply("supply", VOLTS, 9.0, True)
    plant.command_load("CURR", 8.0, True)
    plant.elapse(60)
    # A cold one of the same law takes as long.
    assert plant.truth("fuse_cleared_s") == pytest.approx(first, rel=1e-2)
    plant.refit("F1")
    assert plant.truth("hot_rewirings") == 1
    with pytest.raises(ValueError, match="D1 is no fuse"):
        plant.refit("D1")
