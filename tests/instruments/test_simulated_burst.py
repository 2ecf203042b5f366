"""The trigger system of the simulated meters, and time that passes in pieces."""

from __future__ import annotations

import statistics
import threading

import pytest

from benchkit.files.bench import BenchFile
from instruments.simulated.core import Core
from instruments.simulated.server import build_devices
from instruments.simulated.timebase import RealTime
from tests.instruments.changing_world import ChangingWorld
from tests.instruments.simulated_fake import Bench, bench_file

APERTURE_S = 0.02 / 50
SHORT = ":CONF:VOLT:DC 1,(@101,102);:SENS:VOLT:DC:NPLC 0.02,(@101,102)"
SCAN = ":ROUT:SCAN (@101,102);:TRIG:SOUR TIM;:TRIG:TIM 0.004;:TRIG:COUN 3"
ONE_INPUT = [('"meter-scan"', '"meter-single"')] + [
    (f'"meter", route = "{n}"', '"meter"') for n in (101, 102, 103, 104)
]


class ChangingBench(Bench):
    """All devices over a changing world."""

    world: ChangingWorld

    def __init__(self, file: BenchFile | None = None) -> None:
        super().__init__(file)
        self.world = ChangingWorld()
        self.core = Core(self.world, 7, "T-1")
        self.devices = build_devices(self.file, self.core)


@pytest.fixture
def bench() -> ChangingBench:
    return ChangingBench()


def begin(bench: ChangingBench, *setup: str) -> None:
    for text in setup:
        bench.tell("meter", text)
    bench.tell("meter", ":INIT")
    bench.world.begin()


def test_samples_are_taken_in_the_middle_of_their_apertures(bench: ChangingBench) -> None:
    begin(bench, SHORT, SCAN)
    bench.tell("control", ":SIM:TIME:ADV 60")
    assert [probe for probe, _ in bench.world.looks] == ["drop", "exposed_voltage"] * 3
    opens = [0.0, 0.001, 0.004, 0.005, 0.008, 0.009]
    assert [t for _, t in bench.world.looks] == pytest.approx([t + APERTURE_S / 2 for t in opens])
    assert bench.world.now() == pytest.approx(60 + bench.world.zero_s)


@pytest.mark.parametrize("who", ["thermometer", "supply", "meter"])
def test_time_that_passes_in_messages_counts_too(bench: ChangingBench, who: str) -> None:
    begin(bench, SHORT, SCAN)
    for _ in range(50):  # 0.2 ms a message
        bench.ask(who, "*OPC?")
    assert len(bench.world.looks) == 6


def test_fetching_waits_until_the_last_aperture_closes(bench: ChangingBench) -> None:
    bench.world.course = lambda probe, t: t if probe == "drop" else -t
    begin(bench, SHORT, SCAN)
    first = bench.ask("meter", ":FETC?")
    assert bench.world.now() - bench.world.zero_s == pytest.approx(0.009 + APERTURE_S)
    opens = [0.0, -0.001, 0.004, -0.005, 0.008, -0.009]
    middles = [t + (APERTURE_S / 2 if i % 2 == 0 else -APERTURE_S / 2) for i, t in enumerate(opens)]
    assert list(map(float, first.split(","))) == pytest.approx(middles, abs=5e-5)
    assert bench.ask("meter", ":FETC?") == first


def test_a_protection_that_trips_in_between_is_seen_by_the_samples_after(
    bench: ChangingBench,
) -> None:
    """Over-current of 20 ms trips the supply: at its time, though a second passes in one piece."""
    bench.world.course = lambda probe, t: bench.world.supply_terminals("supply")[0] / 100  # noqa: ARG005
    bench.tell("supply", ":SOUR:VOLT 12;:SOUR:CURR 2;:SOUR:CURR:PROT 1;:OUTP ON")
    bench.world.current = 1.5
    begin(bench, SHORT, ":ROUT:SCAN (@101);:TRIG:SOUR TIM;:TRIG:TIM 0.002;:TRIG:COUN 50")
    bench.tell("control", ":SIM:TIME:ADV 1")
    volts = list(map(float, bench.ask("meter", ":FETC?").split(",")))
    on = sum(v > 0.06 for v in volts)
    assert 9 <= on <= 11
    assert volts[:on] == pytest.approx([0.12] * on, abs=1e-3)
    assert volts[on:] == pytest.approx([0.0] * (50 - on), abs=1e-3)


def test_two_meters_at_once() -> None:
    table = bench_file().model_dump()
    table["instruments"]["other"] = table["instruments"]["meter"]
    table["points"]["exposed_voltage"]["instrument"] = "other"
    bench = ChangingBench(BenchFile.model_validate(table))
    begin(bench, SHORT, ":ROUT:SCAN (@101);:TRIG:SOUR TIM;:TRIG:TIM 0.02;:TRIG:COUN 3")
    for text in (":CONF:VOLT:DC 1,(@102)", ":ROUT:SCAN (@102);:TRIG:COUN 2;:INIT"):
        bench.tell("other", text)
    bench.tell("control", ":SIM:TIME:ADV 1")
    probes = [probe for probe, _ in bench.world.looks]
    assert probes == ["drop", "exposed_voltage", "drop", "exposed_voltage", "drop"]
    # 1 NPLC, of which the middle counts; three messages of 0.2 ms later than the first.
    assert bench.world.looks[1][1] == pytest.approx(0.0102, abs=1e-3)


def test_without_a_timer_scans_follow_one_another(bench: ChangingBench) -> None:
    begin(bench, SHORT, ":ROUT:SCAN (@101,102);:TRIG:COUN 2")
    bench.ask("meter", ":FETC?")
    assert bench.world.looks[2][1] - bench.world.looks[0][1] == pytest.approx(0.002)


def test_a_long_aperture_makes_the_scan_longer(bench: ChangingBench) -> None:
    begin(bench, ":CONF:VOLT:DC 1,(@101,102)", ":ROUT:SCAN (@101,102)")
    bench.ask("meter", ":FETC?")
    assert bench.world.looks[1][1] - bench.world.looks[0][1] == pytest.approx(0.0205)


def test_the_noise_is_that_of_the_aperture(bench: ChangingBench) -> None:
    """As a quick reading has it: 7.07 times that of 1 NPLC; of 1000, known to 2.2 %."""
    begin(bench, SHORT, ":ROUT:SCAN (@101);:TRIG:COUN 1000")
    volts = list(map(float, bench.ask("meter", ":FETC?").split(",")))
    expected = (1e-6**2 + 0.3e-6**2) ** 0.5 / 0.02**0.5
    assert statistics.stdev(volts) == pytest.approx(expected, rel=0.1)


def test_one_input_samples_by_itself() -> None:
    bench = ChangingBench(bench_file(*ONE_INPUT))
    begin(
        bench,
        ":CONF:VOLT:DC 1;:SENS:VOLT:DC:NPLC 0.02",
        ":SAMP:SOUR TIM;:SAMP:TIM 500 US;:SAMP:COUN 4",
    )
    assert bench.ask("meter", ":SAMP:TIM?;:SAMP:COUN?;:SAMP:SOUR?") == "0.000500;4;TIM"
    assert len(bench.ask("meter", ":FETC?").split(",")) == 4
    times = [t for _, t in bench.world.looks]
    assert times == pytest.approx([k * 0.0005 + APERTURE_S / 2 for k in range(4)])


@pytest.mark.parametrize(
    ("setup", "told"),
    [
        (":TRIG:SOUR IMM", "there is no scan list"),
        (":ROUT:SCAN (@101:103);:TRIG:SOUR TIM;:TRIG:TIM 0.0025", "a scan takes 0.0615 s, more"),
        (":ROUT:SCAN (@101,102);:TRIG:COUN 50001", "there is room for 100000 readings only"),
    ],
)
def test_what_cannot_be_initiated(bench: ChangingBench, setup: str, told: str) -> None:
    bench.tell("meter", setup)
    answer = bench.ask("meter", ":INIT;:SYST:ERR?")
    assert answer.startswith("-221")
    assert told in answer


def test_nothing_is_changed_while_it_runs(bench: ChangingBench) -> None:
    begin(bench, SHORT, SCAN)
    for text in (":INIT", ":TRIG:COUN 9", ":TRIG:TIM 1", ":TRIG:SOUR IMM", ":ROUT:SCAN (@103)"):
        assert "a burst is under way" in bench.ask("meter", f"{text};:SYST:ERR?")
    assert len(bench.ask("meter", ":FETC?").split(",")) == 6


@pytest.mark.parametrize("end", [":ABOR", ":CONF:VOLT:DC 1,(@103)", "*RST", ":SIM:INS"])
def test_what_ends_a_burst(bench: ChangingBench, end: str) -> None:
    begin(bench, SHORT, SCAN)
    if end.startswith(":SIM"):
        bench.tell("control", ':SIM:INS "SN-1","s.toml"')
    else:
        bench.tell("meter", end)
    looks = len(bench.world.looks)
    bench.tell("control", ":SIM:TIME:ADV 1")
    assert len(bench.world.looks) == looks < 6
    answer = bench.ask("meter", ":FETC?;:SYST:ERR?")
    assert answer == '-200,"Execution error;there are no readings to fetch"'


def test_a_reading_ends_it_and_configuring_presets_it(bench: ChangingBench) -> None:
    begin(bench, SHORT, SCAN)
    assert float(bench.ask("meter", ":READ? (@101)")) == pytest.approx(0.0, abs=1e-4)
    assert bench.ask("meter", ":FETC?;:SYST:ERR?").startswith("-200")
    assert bench.ask("meter", ":TRIG:COUN?;:TRIG:TIM?;:TRIG:SOUR?") == "3;0.004000;TIM"
    bench.tell("meter", ":CONF:VOLT:DC 1,(@101)")
    assert bench.ask("meter", ":TRIG:COUN?;:TRIG:TIM?;:TRIG:SOUR?") == "1;1.000000;IMM"


def test_in_real_time_samples_are_taken_while_nobody_speaks() -> None:
    clock = RealTime(1.0)
    world = ChangingWorld(clock)
    core = Core(world, 7, "T-1", clock.elapse)
    meter = build_devices(bench_file(), core)["meter"]
    with core.lock:
        meter.execute(SHORT)
        meter.execute(":ROUT:SCAN (@101);:TRIG:SOUR TIM;:TRIG:TIM 0.02;:TRIG:COUN 6")
        world.begin()
        meter.execute(":INIT")
    for _ in range(100):
        with core.lock:
            if len(world.looks) == 6:
                break
        threading.Event().wait(0.05)
    # On a busy machine a look may be late, but never early.
    assert [t > number * 0.02 for number, (_, t) in enumerate(world.looks)] == [True] * 6
    with core.lock:
        answer = meter.execute(":FETC?")
    assert answer is not None
    assert len(answer.split(",")) == 6


def test_a_clock_that_is_ended_leaves_nobody_waiting_for_a_burst() -> None:
    clock = RealTime(1.0)
    world = ChangingWorld(clock)
    core = Core(world, 7, "T-1", clock.elapse)
    meter = build_devices(bench_file(), core)["meter"]
    before = threading.active_count()
    with core.lock:
        meter.execute(SHORT)
        meter.execute(":ROUT:SCAN (@101);:TRIG:SOUR TIM;:TRIG:TIM 60;:TRIG:COUN 5;:INIT")
    clock.end()
    with core.lock:
        answer = meter.execute(":FETC?")
    assert answer is not None
    assert len(answer.split(",")) == 5
    for _ in range(100):
        if threading.active_count() == before:
            break
        threading.Event().wait(0.05)
    assert threading.active_count() == before
