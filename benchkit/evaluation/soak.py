"""The soak: final rise, loss and thermal resistance, each with its budget."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.evaluation.sources import flow_of, rectangular
from benchkit.evaluation.sweep import Sweep, reading_components
from benchkit.files.bench import BenchFile
from benchkit.fits.heating import Heating, fit_heating
from benchkit.metrology import Budget, Component, Distribution
from benchkit.records.record import Record

Floats = NDArray[np.float64]

LATE_SHARE = 0.3
"""The loss that a final rise belongs to is averaged over this last share of the soak."""
LEAST_NOISE_K = 0.005
SLOWEST_SHARE = 1.3
"""A board's slowest time constant is expected within this many times the stage file's."""


@dataclass(frozen=True)
class Soak:
    """A soak taken apart; arrays over its samples, times from the moment the current was set."""

    current_A: float
    heating: Heating
    loss_time_s: Floats
    loss_W: Floats
    late_loss_W: float
    loss_budget: Budget
    warm_drop_V: float
    """Drop at the soak's current once warm, the mean of its last part."""
    warm_drop_budget: Budget
    warm_case_C: float
    resistance_K_per_W: float
    resistance_budget: Budget


def heating_of(
    bench: BenchFile,
    time_s: Floats,
    case_C: Floats,
    ambient_C: Floats,
    rest: tuple[Floats, Floats],
    time_constant_s: float,
) -> Heating:
    """Fit a heating curve; ``rest`` holds case and ambient readings from before anything was on.

    While both sensors sit at ambient their difference is their offset: it is taken off, so that
    only its scatter is left. When the difference is more than both may err, the board was not at
    rest: then nothing is taken off, and the declared offsets stay in the budget.
    """
    table = bench.instruments[bench.points["case"].instrument].temperature
    other = bench.instruments[bench.points["ambient"].instrument].temperature
    assert table is not None
    assert other is not None
    case_rest, ambient_rest = rest
    difference = float(case_rest.mean() - ambient_rest.mean())
    size = case_rest.size
    noise = (
        max(float(np.sqrt(0.5 * (case_rest.var(ddof=1) + ambient_rest.var(ddof=1)))), LEAST_NOISE_K)
        if size > 1
        else 0.05
    )
    limit = table.offset_K + other.offset_K
    common: dict[str, float] = {}
    shapes: dict[str, Distribution] = {}
    if size > 1 and abs(difference) <= limit:
        common["thermometers against each other at rest"] = noise * math.sqrt(2 / size)
        shapes["thermometers against each other at rest"] = "normal"
    else:
        difference = 0.0
        for name, offset in (("case", table.offset_K), ("ambient", other.offset_K)):
            common[f"offset of the {name} thermometer"] = offset / math.sqrt(3)
            shapes[f"offset of the {name} thermometer"] = "rectangular"
    rise = float(case_C[-1] - ambient_C[-1]) - difference if case_C.size else 0.0
    common["gain of the case thermometer"] = abs(rise) * table.reading_percent / 100 / math.sqrt(3)
    shapes["gain of the case thermometer"] = "rectangular"
    return fit_heating(
        time_s,
        case_C - difference,
        ambient_C,
        noise,
        slowest_tau_s=SLOWEST_SHARE * time_constant_s,
        common=common,
        distributions=shapes,
    )


def read_rest(record: Record) -> tuple[Floats, Floats]:
    """Case and ambient at rest, paired."""
    case, ambient = (record.at("rest", point) for point in ("case", "ambient"))
    size = min(len(case), len(ambient))
    return (np.array([r.value for r in case[:size]]), np.array([r.value for r in ambient[:size]]))


def read_soak(record: Record, sweep: Sweep | None) -> Soak | None:
    """Take a record's soak apart; None when it has none or too little of it."""
    settings = record.stage.soak
    begun = [float(str(e["time_s"])) for e in record.events if e.get("kind") == "soak-begins"]
    case, ambient = record.at("soak", "case"), record.at("soak", "ambient")
    if settings is None or not begun or sweep is None or len(ambient) < 2:
        return None
    case = [r for r in case if r.time_s >= begun[0]]
    times = np.array([r.time_s for r in case]) - begun[0]
    ambient_C = np.interp(times + begun[0], [r.time_s for r in ambient], [r.value for r in ambient])
    heating = heating_of(
        record.bench,
        times,
        np.array([r.value for r in case]),
        ambient_C,
        read_rest(record),
        record.stage.heat.time_constant_s,
    )
    drops, currents = record.at("soak", "drop"), record.at("soak", "exposed_current")
    size = min(len(drops), len(currents))
    flow = flow_of(record.stage)
    amps = np.array([r.value for r in currents[:size]])
    amps = flow * (amps - (sweep.current_zero.value if sweep.current_zero.used else 0.0))
    volts = np.array([r.value for r in drops[:size]])
    volts = flow * (volts - (sweep.drop_zero.value if sweep.drop_zero.used else 0.0))
    volts -= record.bench.points["drop"].lead_ohm * amps
    loss = volts * amps
    at = np.array([r.time_s for r in drops[:size]]) - begun[0]
    late = at >= (1 - LATE_SHARE) * at[-1]
    level = float(loss[late].mean())
    drop_budget = _drop_budget(record, sweep, volts[late], amps[late], heating)
    budget = Budget.linear([(float(amps[late].mean()), drop_budget)])
    rise = heating.final_rise_K
    resistance = rise / level
    return Soak(
        settings.current_A,
        heating,
        at,
        loss,
        level,
        budget,
        float(volts[late].mean()),
        drop_budget,
        case[-1].value,
        resistance,
        Budget.linear([(1 / level, heating.final_rise_budget), (-rise / level**2, budget)]),
    )


def _drop_budget(
    record: Record, sweep: Sweep, volts: Floats, amps: Floats, heating: Heating
) -> Budget:
    """The warm drop, at the current it was read at, such that the current times this is the loss.

    P = V I: an error of V counts I times and one of I counts V times. A slope of -V/I in
    ``reading_components``, where an error of I counts -slope times, says just that.
    """
    drop, current = float(volts.mean()), float(amps.mean())
    table = record.bench.points["drop"]
    as_drop = [
        *reading_components(
            sweep, record.bench, drop, current, -drop / current, volts.size, "soak"
        ),
        rectangular("fixture inside the Kelvin taps", table.lead_tolerance_ohm * current),
        rectangular("thermoelectric voltages", table.thermoelectric_V_per_K * heating.final_rise_K),
        Component("loss still drifting", float(np.ptp(volts)) / 2 / math.sqrt(3), "rectangular"),
    ]
    return Budget(c for c in as_drop if c.u != 0.0)
