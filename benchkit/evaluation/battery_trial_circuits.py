"""What a battery trial puts on both ports, worked out from stage file and bench file alone, so that
planning and judging solve the same circuits.

The battery's stand-in is a supply: it gives up to its limit and sinks nothing; only the resistor
across its terminals takes a current that is driven into it, and its voltage rises with that.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import CurrentLoad, LimitedSource, Resistor
from benchkit.circuit.network import Element
from benchkit.errors import InputError
from benchkit.files import BenchFile, StageFile
from benchkit.guard.envelope import PROOF_A, PROOF_V
from benchkit.prediction.connections import (
    BATTERY,
    BLEEDER,
    FLAT_LADDER_V,
    OPEN_OHM,
    SUPPLY,
    Connection,
    surroundings,
)
from benchkit.prediction.operating_point import OperatingPoint, reached
from benchkit.stage import Sample, Stage

Floats = NDArray[np.float64]

OFF, ON, FLAT, BACK = "reversed-battery-off", "reversed-battery-on", "flat-battery", "back-feed"
ORDER = (OFF, ON, FLAT, BACK)
"""Each differs from the one before it by as few leads as can be."""
STIFFER = 0.8
"""The equipment's supply gets this share of what the stand-in can give beside its own resistor, so
that a stage which conducts pulls down the equipment, as beside a battery, and never drives the
stand-in backwards (judgement)."""
OWN_SHARE = 0.7
"""The stand-in's resistor may take this share of its limit at the battery's highest voltage, and of
the proof's at a volt (judgement)."""
BELOW_TRIP = 0.9
"""A stand-in that is driven from outside stays below this share of its over-voltage level."""
PRELOAD_A = 0.01
"""What the output of a supply itself draws when it is driven from outside: nobody prints it, so up
to this (judgement)."""
CONDUCTS = 0.1
"""A stage conducts that lets this share of what could flow through: no sheet's leakage comes near
it, and the saturated or shorted part that is looked for is far above it (judgement)."""
METER, DRAWN = "guarded.meter", "exposed.preload"


def over_voltage_V(volts: float) -> float:
    """Where a source's own protection stands, at its highest voltage in the trial."""
    return 1.1 * volts + 0.5


@dataclass(frozen=True)
class Around:
    """What is on the ports in the trial's states.

    emf_V, flat_V: the stand-in's voltages; flat_V rises. set_V: the equipment's supply. battery_A,
    supply_A: their limits. standin_ohm: across the stand-in. off_ohm: across the guarded port while
    the equipment is off, None where the bench has nothing for it.
    """

    emf_V: float
    flat_V: tuple[float, ...]
    set_V: float
    battery_A: float
    supply_A: float
    standin_ohm: float
    off_ohm: float | None

    @property
    def driven_V(self) -> float:
        """The highest voltage to which the supply can drive the stand-in, through any board: by
        all it gives through the resistor there, or its own voltage."""
        return min(self.supply_A * self.standin_ohm, self.set_V)

    def volts(self, state: str) -> tuple[float, ...]:
        """What the stand-in is set to in a state, in order."""
        return self.flat_V if state == FLAT else (self.emf_V,)

    def limit_A(self, state: str) -> float:
        """The most that can flow through the exposed port where the stage conducts."""
        if state in (ON, FLAT):
            return self.supply_A
        if state == BACK and self.off_ohm is not None:
            return min(self.battery_A, self.emf_V / self.off_ohm)
        return self.battery_A

    def flows_A(self, state: str) -> float:
        """From here on a state's current is no leakage any more: the stage conducts, or charges."""
        return CONDUCTS * self.limit_A(state)


def around_of(file: StageFile, bench: BenchFile) -> Around:
    """InputError naming the key for a bench or a stage file with which the trial cannot be done."""
    trial = file.battery_trial
    assert trial is not None
    if bench.battery is None:
        raise InputError(
            "[battery_trial] needs a battery's stand-in: a second supply of the bench file with "
            'stands_for = "battery"'
        )
    name, table = bench.battery
    ohms = table.bleeder_ohm
    assert ohms is not None
    ports = surroundings(file)
    emf, limit = ports.battery_V, trial.current_limit_A
    key = f"instruments.{name}.bleeder_ohm"
    # At a volt as at the full one, most of the limit is to be left for the stage.
    least = max(emf / (OWN_SHARE * limit), PROOF_V / (OWN_SHARE * PROOF_A))
    if ohms < least:
        raise InputError(
            f"{key} is {ohms:g}: that resistor alone takes {emf / ohms:.3g} A of the stand-in's "
            f"battery_trial.current_limit_A = {limit:g} at {emf:g} V, and {PROOF_V / ohms:.3g} A "
            f"of the {PROOF_A:g} A of a proof at {PROOF_V:g} V; {np.ceil(least):.0f} ohm or more "
            "would do, or a higher battery_trial.current_limit_A"
        )
    supply_A = min(ports.limit_A, STIFFER * (limit - emf / ohms))
    flat = (ports.flat_V, *(v for v in FLAT_LADDER_V if ports.flat_V < v < 0.5 * ports.set_V))
    found = Around(emf, flat, ports.set_V, limit, supply_A, ohms, bench.bench.bleeder_ohm)
    _check_driven(found, key, ports.limit_A, trial.scenarios)
    needing = [state for state in (OFF, BACK) if state in trial.scenarios]
    if needing and found.off_ohm is None:
        raise InputError(
            f"battery_trial.scenarios has {' and '.join(needing)}: the bench file needs "
            "bench.bleeder_ohm, a resistor that stands for what equipment which is off has across "
            "its terminals"
        )
    most = file.limits.battery_current_max_A
    if most is not None and any(
        most >= found.limit_A(state) for state in trial.scenarios if state in (OFF, ON)
    ):
        raise InputError(
            f"limits.battery_current_max_A is {most:g}: it must be below {supply_A:.3g} A, the "
            "most that can flow in the trial, or a short circuit would keep it; raise "
            "battery_trial.current_limit_A"
        )
    return found


def _check_driven(around: Around, key: str, equipment_A: float, states: Sequence[str]) -> None:
    """The stand-in sinks nothing: what is driven into it flows through its resistor."""
    level = BELOW_TRIP * over_voltage_V(around.emf_V)
    if FLAT not in states or around.driven_V <= level:
        return
    enough = (level / STIFFER + around.emf_V) / around.battery_A
    if STIFFER * (around.battery_A - around.emf_V / enough) > equipment_A:
        enough = level / equipment_A
    raise InputError(
        f"{key} is {around.standin_ohm:g}: in flat-battery the equipment's supply can drive "
        f"{around.supply_A:.3g} A into the battery's stand-in, which cannot sink, so that it rises "
        f"to {around.driven_V:.3g} V, too near its over-voltage level of "
        f"{over_voltage_V(around.emf_V):.3g} V; {np.floor(enough):.0f} ohm or less would do"
    )


@dataclass(frozen=True)
class Spread:
    """How far the bench's own elements are from what was asked, arrays of shape (batch,).

    volts, limit: factors. offset_V, offset_A: added. ohms: of the two resistors. preload: share of
    PRELOAD_A.
    """

    volts: Floats | float = 1.0
    offset_V: Floats | float = 0.0
    limit: Floats | float = 1.0
    offset_A: Floats | float = 0.0
    ohms: Floats | float = 1.0
    preload: Floats | float = 0.5


def circuits(
    stage: Stage, around: Around, state: str, volts: Floats | float, spread: Spread
) -> list[Connection]:
    """The circuits of a state in order, the stand-in at ``volts``: the equipment on alone first,
    where it is on."""
    ports = stage.ports
    exposed = (ports.exposed_plus, ports.exposed_minus)
    guarded = (ports.guarded_plus, ports.guarded_minus)
    turned = exposed[::-1] if state in (OFF, ON) else exposed
    bleeder = Resistor("exposed.bleeder", turned, around.standin_ohm * spread.ohms)
    source = LimitedSource(
        BATTERY, turned, volts * spread.volts + spread.offset_V,
        around.battery_A * spread.limit + spread.offset_A,
    )  # fmt: skip
    battery: tuple[Element, ...] = (source, bleeder)
    if state == FLAT:
        battery = (*battery, CurrentLoad(DRAWN, exposed, PRELOAD_A * spread.preload))
    meter = Resistor(METER, guarded, OPEN_OHM)
    if state in (OFF, BACK):
        assert around.off_ohm is not None
        off = Resistor(BLEEDER, guarded, around.off_ohm * spread.ohms)
        return [Connection(battery, (off, meter))]
    supply = LimitedSource(
        SUPPLY, guarded, around.set_V * spread.volts + spread.offset_V,
        around.supply_A * spread.limit + spread.offset_A,
    )  # fmt: skip
    return [Connection((bleeder,), (supply, meter)), Connection(battery, (supply, meter))]


def solved(
    stage: Stage, boards: Sample, around: Around, state: str, volts: Floats | float,
    spread: Spread, case_C: float,
) -> OperatingPoint:  # fmt: skip
    """Where a state's circuits lead, for each board of the sample."""
    return reached(stage, boards, circuits(stage, around, state, volts, spread), case_C, case_C)


def battery_A(state: str, exposed_A: Floats) -> Floats:
    """Out of the battery, of a flat one into it, from the current into the exposed plus
    terminal."""
    return exposed_A if state == BACK else -exposed_A
