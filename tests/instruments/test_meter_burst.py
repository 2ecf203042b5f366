"""A timed burst of the meter: the adapter against the simulated meters, over sockets, while the
world behind them changes."""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass

import numpy as np
import pytest

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile
from instruments.bench import CONTROL_IDENTITY, CONTROL_TIMING
from instruments.clock import SimulatedClock
from instruments.dialects import MeterDialect, load_dialect
from instruments.errors import InstrumentError
from instruments.link import Link
from instruments.meter import ScpiMeter
from instruments.session import Session
from instruments.simulated.server import serve
from tests.instruments.changing_world import ChangingWorld
from tests.instruments.scripted import IMPATIENT
from tests.instruments.simulated_fake import bench_file
from tests.instruments.test_simulated_burst import APERTURE_S, ONE_INPUT

TIMES = IMPATIENT.model_copy(update={"read_s": 0.3, "slow_s": 0.3})
SCAN = load_dialect("meter-scan", MeterDialect).model_copy(update={"link": TIMES})
SINGLE = load_dialect("meter-single", MeterDialect).model_copy(update={"link": TIMES})


@dataclass
class Served:
    """A meter, the clock of its bench, and every message that the meter was sent."""

    meter: ScpiMeter
    clock: SimulatedClock
    said: list[str]


@contextmanager
def served(
    world: ChangingWorld, dialect: MeterDialect = SCAN, file: BenchFile | None = None
) -> Iterator[Served]:
    said: list[str] = []

    def hear(direction: str, text: str) -> None:
        if direction == ">":
            said.append(text.removesuffix(";:SYST:ERR?"))

    with ExitStack() as stack:
        ports = stack.enter_context(serve(file or bench_file(), world)).ports
        links = [Link(n, f"TCPIP::127.0.0.1::{ports[n]}::SOCKET") for n in ("meter", "control")]
        meter = Session(links[0], TIMES, "Weir,S20", hear)
        control = Session(links[1], CONTROL_TIMING, CONTROL_IDENTITY)
        for session in (meter, control):
            stack.callback(session.close)
            session.open()
        said.clear()
        yield Served(ScpiMeter(meter, dialect), SimulatedClock(control), said)


@pytest.fixture
def world() -> ChangingWorld:
    return ChangingWorld()


def arm(bench: Served, world: ChangingWorld, scans: int, interval_s: float) -> None:
    """A burst of drop and exposed voltage; the world's zero is the moment of initiation."""
    bench.meter.arm_burst(["101", "102"], [1.0, 100.0], scans, interval_s)
    world.begin()


def test_every_sample_has_its_own_moment(world: ChangingWorld) -> None:
    world.course = lambda probe, t: t if probe == "drop" else -10 * t
    with served(world) as bench:
        arm(bench, world, 50, 0.004)
        bench.clock.sleep(1.0)
        volts = bench.meter.fetch_burst()
    assert volts.shape == (50, 2)
    middle = np.arange(50) * 0.004 + APERTURE_S / 2
    # Accuracy of the ranges: 0.004 % and 7 uV; 0.0045 % and 0.6 mV; and noise of quick readings.
    assert volts[:, 0] == pytest.approx(middle, abs=5e-5)
    assert volts[:, 1] == pytest.approx(-10 * (middle + 0.001), abs=2e-3)


def test_an_edge_is_seen_between_two_samples(world: ChangingWorld) -> None:
    """A fuse that clears 31.5 ms after initiation, with the waits of a procedure in between."""
    world.course = lambda probe, t: 0.8 if probe == "drop" and t < 0.0315 else 0.0
    with served(world) as bench:
        arm(bench, world, 40, 0.002)
        for _ in range(10):
            bench.clock.sleep(0.007)
        drop = bench.meter.fetch_burst()[:, 0]
    assert drop[:16] == pytest.approx([0.8] * 16, abs=1e-3)  # sample 15 is at 30.2 ms
    assert drop[16:] == pytest.approx([0.0] * 24, abs=1e-3)  # sample 16 at 32.2 ms


def test_initiating_returns_at_once_and_fetching_waits(world: ChangingWorld) -> None:
    with served(world) as bench:
        began = bench.clock.now()
        arm(bench, world, 10, 0.1)
        assert bench.clock.now() - began < 0.01
        bench.clock.sleep(0.25)
        assert len(world.looks) == 6
        bench.meter.fetch_burst()
        # The last aperture closes after nine intervals and one step.
        waited = bench.clock.now() - world.zero_s
        assert waited == pytest.approx(0.901 + APERTURE_S, abs=5e-4)


def test_an_overload_is_infinite_with_its_sign(world: ChangingWorld) -> None:
    def course(probe: str, t: float) -> float:
        return math.copysign(5.0, t - 0.009) if probe == "drop" and abs(t - 0.009) < 0.006 else 0.5

    world.course = course
    with served(world) as bench:
        bench.meter.arm_burst(["101"], [1.0], 10, 0.002)
        world.begin()
        drop = bench.meter.fetch_burst()[:, 0]
    finite = np.isfinite(drop)
    assert finite.tolist() == [True] * 2 + [False] * 6 + [True] * 2
    assert drop[2:8].tolist() == [-math.inf] * 3 + [math.inf] * 3
    assert drop[finite] == pytest.approx([0.5] * 4, abs=1e-3)


def test_one_input_bursts_too(world: ChangingWorld) -> None:
    world.course = lambda probe, t: t  # noqa: ARG005
    with served(world, SINGLE, bench_file(*ONE_INPUT)) as bench:
        bench.meter.arm_burst([None], [0.1], 100, 0.0005)
        world.begin()
        volts = bench.meter.fetch_burst()
    assert volts.shape == (100, 1)
    assert volts[:, 0] == pytest.approx(np.arange(100) * 0.0005 + APERTURE_S / 2, abs=1e-4)


def test_ranges_and_aperture_go_first_and_are_forgotten_after(world: ChangingWorld) -> None:
    with served(world) as bench:
        bench.meter.configure("101", 1.0, 0.02)
        bench.said.clear()
        arm(bench, world, 3, 0.01)
        bench.meter.fetch_burst()
        aperture = ":SENS:VOLT:DC:NPLC 0.02,(@102);:SENS:VOLT:DC:RANG? (@102);"
        assert bench.said == [
            f":CONF:VOLT:DC 100,(@102);{aperture}:SENS:VOLT:DC:NPLC? (@102)",
            ":ROUT:SCAN (@101,102);:TRIG:SOUR TIM;:TRIG:TIM 0.01;:TRIG:COUN 3;:TRIG:TIM?",
            ":INIT",
            ":FETC?",
        ]
        bench.said.clear()
        bench.meter.configure("101", 1.0, 0.02)
        assert bench.said[0].startswith(":CONF:VOLT:DC 1,(@101)")
        assert bench.meter.read("101") == pytest.approx(0.0, abs=1e-4)


def test_a_burst_that_is_not_fetched_is_ended_before_anything_else(world: ChangingWorld) -> None:
    world.course = lambda probe, t: 0.25  # noqa: ARG005
    with served(world) as bench:
        arm(bench, world, 1000, 0.01)
        bench.said.clear()
        bench.meter.configure("101", 1.0, 1)
        assert bench.said[0] == ":ABOR"
        assert bench.meter.read("101") == pytest.approx(0.25, abs=1e-3)
        assert bench.clock.now() - world.zero_s < 1.0
        with pytest.raises(RuntimeError, match="no burst was armed"):
            bench.meter.fetch_burst()
        bench.said.clear()
        bench.meter.configure("102", 1.0, 1)
        assert ":ABOR" not in bench.said


def test_an_error_of_the_meter_is_an_error(world: ChangingWorld) -> None:
    with served(world) as bench:
        with pytest.raises(InstrumentError) as caught:
            bench.meter.arm_burst(["101", "999"], [1.0, 1.0], 10, 0.01)
        assert caught.value.number == -222
        with pytest.raises(RuntimeError, match="no burst was armed"):
            bench.meter.fetch_burst()


@pytest.mark.parametrize(
    ("routes", "ranges", "scans", "interval", "told"),
    [
        (["101"] * 2, [1.0, 1.0], 10, 0.01, "needs different routes and a range for each"),
        (["101", "102"], [1.0], 10, 0.01, "needs different routes and a range for each"),
        ([], [], 10, 0.01, "needs different routes"),
        (["101"], [1.0], 0, 0.01, "takes 1 to 10000 scans in a burst, not 0"),
        (["101"], [1.0], 10001, 0.01, "takes 1 to 10000 scans in a burst, not 10001"),
        (["101"], [1.0], 10, 0.0009, "needs at least 0.001 s from one scan of 1 to the next"),
        (["101", "102", "103"], [1.0] * 3, 10, 0.002, "needs at least 0.003 s from one scan of 3"),
    ],
)
def test_what_a_meter_cannot_do_is_refused_before_anything_is_sent(
    world: ChangingWorld,
    routes: list[str | None],
    ranges: list[float],
    scans: int,
    interval: float,
    told: str,
) -> None:
    with served(world) as bench:
        with pytest.raises(InputError, match=told):
            bench.meter.arm_burst(routes, ranges, scans, interval)
        assert bench.said == []
        assert bench.meter.shortest_interval_s(3) == 0.003
