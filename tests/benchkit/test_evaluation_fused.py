"""A burst written by hand, taken apart: a rectangular pulse has an I2t that anyone can work out."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from benchkit.evaluation.clamp_trial_read import changes, read_state
from benchkit.evaluation.fused_trial import fuse_band
from benchkit.evaluation.fused_trial_read import read_burst
from benchkit.files import BenchFile, StageFile, load
from benchkit.files.loading import parse
from benchkit.reading import Reading
from benchkit.records.record import Record
from benchkit.stage import build_stage
from tests.clamp_shop import FUSED, REVERSE, stage_text
from tests.simulated_bench import workshop

STEP_S, SKEW_S = 0.002, 0.001
AMPS, SECONDS, BELOW_V = 8.0, 0.1, 1.05


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> BenchFile:
    return load(BenchFile, workshop(tmp_path_factory.mktemp("w") / "w") / "bench.toml")


def read(time_s: float, point: str, value: float, range_V: float, status: str = "ok") -> Reading:
    unit = "A" if point == "exposed_current" else "V"
    return Reading(time_s, point, value, unit, 0.0, range_V, status)  # type: ignore[arg-type]


def burst_of(
    bench: BenchFile, onset_s: float, seconds: float, amps: float = AMPS, lasts_s: float = 0.4
) -> Record:
    """A rectangular pulse as a scanner reads it, current and guarded voltage by turns."""
    readings: list[tuple[str, Reading]] = []
    for k in range(8):
        readings.append(("fused/zero", read(0.01 * k, "exposed_current", 0.0, 0.1)))
        readings.append(("fused/zero", read(0.01 * k, "guarded_voltage", 0.0, 10.0)))
    for k in range(round(lasts_s / STEP_S)):
        for point, at, high, range_V in (
            ("exposed_current", k * STEP_S, amps, 0.1),
            ("guarded_voltage", k * STEP_S + SKEW_S, BELOW_V, 10.0),
        ):
            flows = onset_s <= at < onset_s + seconds
            readings.append(("fused/burst", read(at, point, -high * flows, range_V)))
    stage = parse(StageFile, stage_text(FUSED + REVERSE), "stage.toml")
    return Record(Path(), bench, stage, tuple(readings), ())


def test_a_rectangular_pulse_has_the_I2t_of_a_rectangle(bench: BenchFile) -> None:
    burst = read_burst(burst_of(bench, 0.0071, SECONDS))
    assert burst is not None
    assert burst.pulse is not None
    pulse = burst.pulse
    assert pulse.clears is not None
    assert pulse.let_through is not None
    assert pulse.peak is not None
    assert pulse.onset_s == pytest.approx(0.0071, abs=STEP_S / 2)
    assert pulse.clears.value == pytest.approx(SECONDS, abs=STEP_S)
    assert pulse.current.value == pytest.approx(AMPS, rel=1e-9)
    assert pulse.let_through.value == pytest.approx(AMPS**2 * pulse.clears.value, rel=1e-9)
    assert pulse.peak.value == pytest.approx(BELOW_V, rel=1e-9)
    # Two edges, each anywhere between two readings: their sum has a triangular distribution.
    spread = pulse.clears.budget.expanded().U
    triangle = STEP_S * (1 - np.sqrt(0.05))
    assert spread == pytest.approx(triangle, rel=0.005)
    through = pulse.let_through.budget
    most = AMPS**2 * spread
    through_U = through.expanded().U
    assert through_U == pytest.approx(most, rel=0.1)
    gains = [c for c in through.components if "gain" in c.name or "shunt" in c.name]
    assert len(gains) == 2
    # A relative error of the current counts twice in its square: 0.005 % and 0.1 %, rectangular.
    for component, percent in zip(gains, (0.005, 0.1), strict=True):
        share = component.u / pulse.let_through.value
        assert share == pytest.approx(2 * percent / 100 / np.sqrt(3), rel=1e-6)


def test_the_interval_holds_the_truth_wherever_the_edges_fall(bench: BenchFile) -> None:
    """A seeded draw of 400 pulses: 95 % of them, and no less than 93 %, as for every interval."""
    draw = np.random.default_rng(5)
    inside = []
    for _ in range(400):
        onset, seconds = 0.01 + STEP_S * draw.uniform(), 0.03 + STEP_S * draw.uniform()
        burst = read_burst(burst_of(bench, onset, seconds, lasts_s=0.06))
        assert burst is not None
        assert burst.pulse is not None
        assert burst.pulse.clears is not None
        clears = burst.pulse.clears
        inside.append(abs(clears.value - seconds) <= clears.budget.expanded().U)
    assert 0.93 <= np.mean(inside) <= 0.98


def test_a_current_that_never_ends_has_not_cleared(bench: BenchFile) -> None:
    burst = read_burst(burst_of(bench, 0.01, 10.0))
    assert burst is not None
    assert burst.pulse is not None
    assert burst.pulse.clears is None
    assert burst.pulse.let_through is None
    assert burst.pulse.lasted_s == pytest.approx(0.39, abs=STEP_S)


def test_no_current_is_no_pulse_and_one_from_the_start_has_no_onset(bench: BenchFile) -> None:
    nothing = read_burst(burst_of(bench, 0.01, SECONDS, amps=0.1))
    assert nothing is not None
    assert nothing.pulse is None
    at_once = read_burst(burst_of(bench, -0.02, SECONDS))
    assert at_once is not None
    assert at_once.pulse is not None
    assert at_once.pulse.late


def test_overloads_are_counted(bench: BenchFile) -> None:
    record = burst_of(bench, 0.01, SECONDS)
    lost = ("fused/burst", read(0.02, "exposed_current", float("nan"), 0.1, "overload"))
    with_lost = Record(record.path, bench, record.stage, (*record.readings, lost), ())
    burst = read_burst(with_lost)
    assert burst is not None
    assert burst.pulse is not None
    assert burst.pulse.lost == 1


def test_large_currents_let_the_printed_I2t_through() -> None:
    """Adiabatic: no heat leaves, and melting and arcing I2t are those of the sheet, 5 A2s."""
    stage = build_stage(parse(StageFile, stage_text(""), "stage.toml"), "stage.toml")
    band = fuse_band(stage, "F1", 500.0)
    assert band.let_through.nominal == pytest.approx(5.0, rel=1e-3)
    assert band.let_through.low == pytest.approx(5.0, rel=1e-3)
    slower = band.clears.high
    assert slower >= band.clears.nominal * (1 - 1e-12)


@pytest.mark.parametrize(("more_V", "seen"), [(0.0, False), (0.02, True)])
def test_a_change_of_the_clamp_is_what_is_more_than_the_measurement_s(
    more_V: float, seen: bool, bench: BenchFile
) -> None:
    """Both states are read with the meter's own gain error: it cancels, a change does not."""
    readings: list[tuple[str, Reading]] = [("rest", read(0.0, "case", 25.0, 0.0))]
    for when, volts in (("before", 0.78), ("after", 0.78 + more_V)):
        for k in range(8):
            noise = 1e-5 * (-1) ** k
            for point, range_V in (("exposed_current", 0.1), ("guarded_voltage", 10.0)):
                zero = read(k, point, noise, range_V)
                readings.append((f"clamp/{when}/zero-drop", zero))
        for k in range(4):
            noise = 1e-5 * (-1) ** k
            step = f"clamp/{when}/drop/0.5"
            readings += [
                (step, read(20.0 + k, "exposed_current", -0.5 + noise, 0.1)),
                (step, read(20.0 + k, "exposed_voltage", -volts - 0.03, 10.0)),
                (step, read(20.0 + k, "guarded_voltage", -volts + noise, 10.0)),
            ]
    file = parse(StageFile, stage_text(REVERSE), "stage.toml")
    record = Record(Path(), bench, file, tuple(readings), ())
    stage = build_stage(file, "stage.toml")
    [change] = changes(read_state(record, stage, "before"), read_state(record, stage, "after"))
    U = change.change.budget.expanded(0.999).U
    assert change.change.value == pytest.approx(more_V, abs=2e-4)
    assert (abs(change.change.value) > U) is seen
    gain = next(c for c in change.change.budget.components if "10 V range" in c.name)
    # 0.0035 % of the reading, rectangular: of the change alone, not of either drop.
    assert abs(gain.u) <= 3.5e-5 * (more_V + 1e-4)
