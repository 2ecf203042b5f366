"""The simulated meter and thermometer: ranges, aperture, errors within accuracy, seeds."""

from __future__ import annotations

import statistics

import pytest

from tests.instruments.simulated_fake import Bench, bench_file

SETUP = ":CONF:VOLT:DC {0},(@101);:SENS:VOLT:DC:NPLC {1},(@101)"


@pytest.fixture
def bench() -> Bench:
    return Bench()


def readings(bench: Bench, count: int) -> list[float]:
    return [float(bench.ask("meter", ":READ? (@101)")) for _ in range(count)]


@pytest.mark.parametrize(
    ("asked", "given"),
    [("0.1", 0.1), ("0.5", 1), ("1", 1), ("5", 10), ("100", 100), ("DEF", 100), ("-5", 10)],
)
def test_the_smallest_range_that_holds_the_value(bench: Bench, asked: str, given: float) -> None:
    bench.tell("meter", f":CONF:VOLT:DC {asked},(@101)")
    assert float(bench.ask("meter", ":SENS:VOLT:DC:RANG? (@101)")) == given


def test_a_range_that_is_not_there(bench: Bench) -> None:
    assert bench.ask("meter", ":CONF:VOLT:DC 300,(@101);:SYST:ERR?").startswith("-222")


def test_configuring_presets_the_aperture_and_channels_keep_their_own(bench: Bench) -> None:
    bench.tell("meter", SETUP.format(1, 10))
    assert bench.ask("meter", ":SENS:VOLT:DC:NPLC? (@101,102)") == "10,1"
    bench.tell("meter", ":SENS:VOLT:DC:RANG 10,(@101)")
    assert bench.ask("meter", ":VOLT:NPLC? (@101)") == "10"
    bench.tell("meter", ":CONF:VOLT:DC 1,(@101)")
    assert bench.ask("meter", ":VOLT:DC:NPLC? (@101)") == "1"
    assert bench.ask("meter", ":SENS:VOLT:DC:NPLC 3,(@101);:SYST:ERR?").startswith("-224")


@pytest.mark.parametrize(("frequency", "nplc"), [(50, 10), (60, 1), (50, 0.02)])
def test_a_reading_takes_its_aperture(frequency: int, nplc: float) -> None:
    head = f'name = "Test bench"\nline_frequency_Hz = {frequency}'
    bench = Bench(bench_file(('name = "Test bench"', head)))
    bench.tell("meter", SETUP.format(1, nplc))
    before = bench.world.now()
    bench.ask("meter", ":READ? (@101,101)")
    expected = 0.0002 + 2 * (0.0005 + nplc / frequency)
    assert bench.world.now() - before == pytest.approx(expected)


@pytest.mark.parametrize(
    ("volts", "answer"), [(1.21, "9.9E37"), (-1.21, "-9.9E37"), (1.19, None), (-1.19, None)]
)
def test_overload(bench: Bench, volts: float, answer: str | None) -> None:
    """SCPI-1999 vol. 1 clause 7.2.1.4 (from memory): infinity is 9.9E37."""
    bench.tell("meter", SETUP.format(1, 1))
    bench.world.volts["drop"] = volts
    got = bench.ask("meter", ":READ? (@101)")
    if answer is None:
        assert float(got) == pytest.approx(volts, rel=1e-3)
    else:
        assert got == answer


@pytest.mark.parametrize("range_V", [0.1, 1, 10, 100])
def test_errors_are_fixed_and_within_the_declared_accuracy(range_V: float) -> None:
    gains, offsets = [], []
    for seed in range(40):
        bench = Bench(bench_file(("seed = 7", f"seed = {seed}")))
        accuracy = next(a for a in bench.file.instruments["meter"].voltage if a.range_V == range_V)
        bench.tell("meter", SETUP.format(range_V, 100))
        zero = readings(bench, 1)[0]
        bench.world.volts["drop"] = range_V
        full = readings(bench, 1)[0]
        offsets.append(zero / (range_V * accuracy.range_percent / 100))
        gains.append((full - zero - range_V) / (range_V * accuracy.reading_percent / 100))
    for errors in (gains, offsets):
        assert max(map(abs, errors)) < 1.15  # with the noise
        assert max(errors) > 0.5
        assert min(errors) < -0.5


@pytest.mark.parametrize("nplc", [1, 100])
def test_noise(bench: Bench, nplc: float) -> None:
    """Standard deviation of 400 readings: its own relative standard deviation is 3.5 %."""
    bench.tell("meter", SETUP.format(1, nplc))
    expected = (1e-6**2 + 0.3e-6**2) ** 0.5 / nplc**0.5
    assert statistics.stdev(readings(bench, 400)) == pytest.approx(expected, rel=0.15)


def board(bench: Bench, serial: str) -> list[float]:
    bench.tell("control", f':SIM:INS "{serial}","s.toml"')
    return readings(bench, 5)


def test_same_seed_and_serial_same_readings_whatever_came_before(bench: Bench) -> None:
    other = Bench()
    readings(other, 3)
    board(other, "SN-9")
    first = board(bench, "SN-1")
    assert board(other, "SN-1") == first
    assert board(bench, "SN-2") != first
    assert board(Bench(bench_file(("seed = 7", "seed = 8"))), "SN-1") != first


def test_readings_are_pinned(bench: Bench) -> None:
    """The same bytes on every machine and Python: seeding is by text, not by hash()."""
    bench.tell("meter", SETUP.format(1, 1))
    bench.world.volts["drop"] = 0.5
    assert bench.ask("meter", ":READ? (@101)") == "4.99989800E-01"


def test_unused_channels_are_short_circuited_and_others_are_not_there(bench: Bench) -> None:
    assert abs(float(bench.ask("meter", ":READ? (@120)"))) < 0.01
    assert bench.ask("meter", ":READ? (@121);:SYST:ERR?").startswith("-222")
    assert bench.ask("meter", ":READ?;:SYST:ERR?").startswith("-109")


def test_single_meter_has_no_channels() -> None:
    swaps = [('"meter-scan"', '"meter-single"')]
    swaps += [(f'"meter", route = "{n}"', '"meter"') for n in (101, 102, 103, 104)]
    bench = Bench(bench_file(*swaps))
    bench.world.volts["drop"] = 0.25
    bench.tell("meter", ":CONF:VOLT:DC 1;:SENS:VOLT:DC:NPLC 10")
    before = bench.world.now()
    read, range_V, nplc, lowest = bench.ask(
        "meter", ":READ?;:SENS:VOLT:DC:RANG?;:SENS:VOLT:DC:NPLC?;:VOLT:RANG? MIN"
    ).split(";")
    assert float(read) == pytest.approx(0.25, abs=1e-4)
    assert (float(range_V), float(nplc), float(lowest)) == (1, 10, 0.1)
    assert bench.world.now() - before == pytest.approx(0.2002)
    assert bench.ask("meter", ":READ? (@101);:SYST:ERR?").startswith("-108")


def test_thermometer(bench: Bench) -> None:
    before = bench.world.now()
    case, ambient = map(float, bench.ask("thermometer", ":MEAS:TEMP? (@101,102)").split(","))
    assert bench.world.now() - before == pytest.approx(0.0042)
    assert case == pytest.approx(40, abs=0.6)
    assert ambient == pytest.approx(25, abs=0.6)
    assert case - 40 != pytest.approx(ambient - 25, abs=1e-3)  # each sensor has its own offset
    many = [float(bench.ask("thermometer", ":MEAS:TEMP?")) for _ in range(400)]
    assert statistics.stdev(many) == pytest.approx(0.02, rel=0.15)


def test_an_open_sensor_is_not_a_number(bench: Bench) -> None:
    """SCPI-1999 vol. 1 clause 7.2.1.5 (from memory): NaN is 9.91E37."""
    bench.world.temperatures["case"] = None
    assert bench.ask("thermometer", ":MEAS:TEMP? (@101)") == "9.91E37"
    assert bench.ask("thermometer", ":MEAS:TEMP? (@110)") == "9.91E37"
