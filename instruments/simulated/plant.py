"""The true world behind the simulated instruments: circuit, heat, wiring and faults.

It solves the same kind of network as the prediction, but with what the prediction does not know:
this board's own parts, fixture and lead resistance, thermoelectric voltages, a shunt that is not
quite its nominal value, a supply and a load that take time to settle, and heat with more time
constants than any fit assumes.
"""

from __future__ import annotations

import math
import random
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import GROUND, Resistor, network, solve
from benchkit.errors import InputError
from benchkit.files import BenchFile
from benchkit.topologies.base import EXPOSED, GUARDED
from instruments.simulated import INSTRUMENT_FAULTS
from instruments.simulated.board import Board, make_board, seed_of
from instruments.simulated.heat import LONGEST_STEP_S
from instruments.simulated.terminals import SUPPLY_OHM, LoadInput, SupplyOutput
from instruments.simulated.timebase import Timebase

Floats = NDArray[np.float64]

SUPPLY_RISE_S = 0.004
SUPPLY_FALL_S, FALL_STEP_S = 0.02, 0.04
LOAD_LAG_S = 0.003
LEAD_OHM = 0.018
OFF_OHM = 50.0
"""What discharges the output of a supply that is off."""
LAWS_END_C = 250.0
"""The laws of the parts are not valid beyond; a real part would soon be dead."""
NEAR_K = 2.0
ROUNDING_S = 1e-6

WIRING_FAULTS = {
    "lead-off:drop": "a Kelvin lead of this point is off: the meter floats",
    "lead-off:exposed_voltage": "a lead of this point is off: the meter floats",
    "lead-off:guarded_voltage": "a lead of this point is off: the meter floats",
    "sensor-open:case": "the case sensor is open",
    "sensor-open:ambient": "the ambient sensor is open",
    "lead-resistance": "this many ohms more in the lead from the supply",
}
"""What can be wrong with the wiring, by name."""


@dataclass(frozen=True)
class _State:
    """One solved operating point and how it moves with current and temperature."""

    key: tuple[object, ...]
    amps: float
    junction_C: float
    values: dict[str, float]
    by_amp: dict[str, float]
    by_kelvin: dict[str, float]

    def at(self, name: str, amps: float, junction_C: float) -> float:
        """A quantity near this point, to first order."""
        return (
            self.values[name]
            + self.by_amp[name] * (amps - self.amps)
            + self.by_kelvin[name] * (junction_C - self.junction_C)
        )


class Plant:
    """See ``instruments.simulated.world.World``."""

    def __init__(self, bench: BenchFile, bench_path: Path, timebase: Timebase) -> None:
        if bench.simulated is None:
            raise InputError(f"{bench_path}: has no [simulated] table, so it cannot be simulated")
        self._time = timebase
        self._settings = bench.simulated
        self._faults: list[tuple[str, float, float]] = []
        draw = random.Random(seed_of(self._settings.seed, "wiring"))
        current, drop = bench.points["exposed_current"], bench.points["drop"]
        share = current.shunt_tolerance_percent / 100
        self._shunt = (current.shunt_ohm or 0.01) * (1 + draw.uniform(-share, share))
        self._fixture_ohm = max(
            0.0, drop.lead_ohm + draw.uniform(-drop.lead_tolerance_ohm, drop.lead_tolerance_ohm)
        )
        self._thermal_V_per_K = draw.uniform(-1, 1) * drop.thermoelectric_V_per_K
        self._board: Board | None = None
        self._age_s = 0.0
        self._lived_until = timebase.now()
        self._command_supply = (0.0, 0.0, False)
        self._command_load = ("CURR", 0.0, False)
        self._emf = self._amps = self._emf_at_switch = self._since_switch_s = 0.0
        self._state: _State | None = None
        self._guess: dict[str, float] = {}
        self._guess_of: tuple[float, bool] | None = None

    # World: time

    def now(self) -> float:
        """Bench time in seconds."""
        return self._time.now()

    def elapse(self, seconds: float) -> None:
        """Let bench time pass, and the plant live through it."""
        self._time.elapse(seconds)
        self._live_through(seconds)
        self._lived_until += seconds
        self._catch_up()

    def _catch_up(self) -> None:
        """Live until now: in real time the clock runs on between two messages.

        With a virtual clock nothing but rounding is left over here, and it is dropped: a board's
        life must not depend on how late it was put in.
        """
        left = self._time.now() - self._lived_until
        if left > ROUNDING_S:
            self._live_through(left)
        self._lived_until = self._time.now()

    def _live_through(self, seconds: float) -> None:
        left = seconds
        while left > 0:
            step = min(left, LONGEST_STEP_S)
            self._live(step)
            left -= step
        self._age_s += seconds

    def _live(self, seconds: float) -> None:
        self._since_switch_s += seconds
        self._emf = self._emf_now()
        self._amps = _towards(self._amps, self._target_amps(), seconds / LOAD_LAG_S)
        if self._board is not None:
            self._board.heat.pass_time(seconds, max(self._quantity("loss"), 0.0))

    def _emf_now(self) -> float:
        """Up after a dead time; down like a capacitor that discharges, in steps, because every
        step is an operating point to solve."""
        volts, _, on = self._command_supply
        if on:
            return volts if self._since_switch_s >= SUPPLY_RISE_S else self._emf
        steps = math.floor(self._since_switch_s / FALL_STEP_S)
        left = self._emf_at_switch * math.exp(-steps * FALL_STEP_S / SUPPLY_FALL_S)
        return left if left > 1e-6 else 0.0

    def _target_amps(self) -> float:
        mode, value, drawing = self._command_load
        return value if drawing and mode == "CURR" else 0.0

    # World: what the instruments do

    def command_supply(self, voltage_V: float, current_A: float, on: bool) -> None:
        """Take the supply's new set-points."""
        self._catch_up()
        if on != self._command_supply[2]:
            self._since_switch_s, self._emf_at_switch = 0.0, self._emf
        self._command_supply = (voltage_V, current_A, on)

    def command_load(self, mode: str, value: float, on: bool) -> None:
        """Take the load's new set-point."""
        self._catch_up()
        self._command_load = (mode, value, on)

    def insert(self, serial: str, stage_path: str) -> None:
        """Put a board in; everything at ambient, board time 0."""
        self._lived_until = self.now()
        try:
            self._board = make_board(
                Path(stage_path),
                serial,
                self._settings.seed,
                self._settings.boards.get(serial, []),
                self._settings.ambient_C,
            )
        except InputError as error:
            raise ValueError(str(error)) from None
        self._age_s = 0.0
        self._emf = self._amps = self._emf_at_switch = self._since_switch_s = 0.0
        self._state = None
        self._guess_of = None
        self._faults = []
        for spelled in self._settings.faults:
            what, _, at = spelled.partition("@")
            name, _, value = what.partition("=")
            self.fault(name, float(at or 0), float(value or 1))

    def fault(self, name: str, at_s: float, value: float) -> None:
        """Arm a fault of wiring, instrument or link."""
        kinds = {known.partition(":")[0] for known in INSTRUMENT_FAULTS}
        if name not in WIRING_FAULTS and name.partition(":")[0] not in kinds:
            raise ValueError(
                f"{name!r} is not a fault of the bench; they are "
                f"{', '.join([*WIRING_FAULTS, *INSTRUMENT_FAULTS])}"
            )
        self._faults.append((name, at_s, value))
        self._state = None

    def clear_faults(self) -> None:
        """Take every armed fault away."""
        self._faults = []
        self._state = None

    def active(self, name: str) -> float | None:
        """The value of a fault whose time has come, or None."""
        if not self._faults:
            return None
        age = self._age_s
        values = [value for known, at_s, value in self._faults if known == name and at_s <= age]
        return values[-1] if values else None

    # World: true quantities

    def supply_terminals(self) -> tuple[float, float, bool]:
        """True volts and amperes of the supply, and whether it limits its current."""
        amps = self._read("current")
        limit = self._command_supply[1]
        return self._read("supply"), amps, self._command_supply[2] and amps >= 0.999 * limit

    def load_terminals(self) -> tuple[float, float]:
        """True volts and amperes of the load."""
        return self._read("guarded_voltage"), self._read("load")

    def voltage(self, probe: str) -> float:
        """True volts between the two wires of a meter channel."""
        if self.active(f"lead-off:{probe}") is not None:
            return 0.0137
        if probe == "exposed_current":
            return self._read("current") * self._shunt
        if probe == "drop":
            board = self._board
            warm = board.heat.case_K if board else 0.0
            fixture = self._fixture_ohm * self._read("current")
            return self._read("drop") + fixture + self._thermal_V_per_K * warm
        return self._read(probe)

    def temperature(self, probe: str) -> float | None:
        """True degrees Celsius at a sensor; None when it is open."""
        if self.active(f"sensor-open:{probe}") is not None:
            return None
        return self._ambient() + (
            self._board.heat.sensor_K if probe == "case" and self._board else 0.0
        )

    def truth(self, name: str) -> float:
        """For campaigns: ``drop@3.0`` (V at 3 A, now), ``thermal_resistance@0.5`` (K/W at 0.5 W),
        ``case_K``, ``junction_C``, or a quantity of the circuit such as ``current``."""
        what, _, at = name.partition("@")
        board = self._board
        if board is None:
            raise KeyError(name)
        if what == "drop":
            junction = self._junction()
            return self._solve(float(at), junction).values["drop"]
        if what == "thermal_resistance":
            loss = float(at)
            return board.heat.final_case_K(loss) / loss
        if what in ("case_K", "junction_C"):
            return board.heat.case_K if what == "case_K" else self._junction()
        return self._read(what)

    def _ambient(self) -> float:
        if self._board is None:
            return self._settings.ambient_C
        age = self._age_s
        swing = math.sin(age / 290.0 + self._board.ambient_phase)
        return self._board.ambient_C + self._board.ambient_swing_K * swing

    def _junction(self) -> float:
        heat = self._board.heat if self._board else None
        warm = self._ambient() + (heat.case_K + heat.junction_K if heat else 0.0)
        return min(warm, LAWS_END_C)

    def _read(self, name: str) -> float:
        self._catch_up()
        return self._quantity(name)

    def _quantity(self, name: str) -> float:
        if self._board is None:
            return self._emf if name in ("supply", "exposed_voltage") else 0.0
        junction = self._junction()
        state = self._state
        if (
            state is None
            or state.key != (self._emf, self._command_supply[1:], self._command_load)
            or abs(junction - state.junction_C) > NEAR_K
        ):
            # At the current the load is going to: on the way there the straight line serves.
            state = self._state = self._solve(self._target_amps(), junction)
        return state.at(name, self._amps, junction)

    def _solve(self, amps: float, junction_C: float) -> _State:
        """Solve at the point, a little more current, and a little warmer, in one batch."""
        board = self._board
        assert board is not None
        key = (self._emf, self._command_supply[1:], self._command_load)
        mode, value, drawing = self._command_load
        step_A, step_K = max(1e-3 * amps, 1e-6), 0.1
        junction = np.array([junction_C, junction_C, junction_C + step_K])
        steps = np.array([amps, amps + step_A, amps])
        load_mode, load_value = (mode, value) if drawing and mode != "CURR" else ("CURR", steps)
        _, limit, on = self._command_supply
        lead = LEAD_OHM + self._shunt + (self.active("lead-resistance") or 0.0)
        stray = board.faults.get("dry-joint", 0.0)
        port = "port+" if stray else EXPOSED
        source = (
            SupplyOutput("supply", (port, GROUND), self._emf, limit, SUPPLY_OHM + lead)
            if on and self._emf > 0
            else Resistor("supply", (port, "idle"), OFF_OHM + lead)
        )
        circuit = network(
            [
                source,
                *([Resistor("joint", (port, EXPOSED), stray)] if stray else []),
                *board.elements(junction),
                LoadInput("load", (GUARDED, GROUND), load_mode, load_value),
            ],
            held={"idle": self._emf},
        )
        # Near the last point when only the load moved, or while the output runs down; from
        # scratch when the supply was switched or set.
        before = self._guess_of
        near = (
            self._guess
            if before and before[1] == on and (not on or before[0] == self._emf)
            else None
        )
        level = self._emf if on else 0.0
        fresh = dict.fromkeys((port, EXPOSED, GUARDED), level)
        solution = solve(circuit, 3, start=near or fresh)
        if near is not None and not solution.settled.all():
            solution = solve(circuit, 3, start=fresh)
        self._guess_of = (self._emf, on)
        if not solution.settled.all():
            raise ArithmeticError("the simulated circuit has no operating point")
        self._guess = {name: float(v[0]) for name, v in solution.volts.items()}
        current = -solution.currents["supply"]
        quantities = {
            "supply": solution.volts[port] + lead * current,
            "exposed_voltage": solution.volts[port],
            "guarded_voltage": solution.volts[GUARDED],
            "drop": solution.between(port, GUARDED),
            "current": current,
            "load": solution.currents["load"],
        }
        quantities["loss"] = quantities["drop"] * quantities["current"]
        return _State(
            key,
            amps,
            junction_C,
            {name: float(v[0]) for name, v in quantities.items()},
            {name: float(v[1] - v[0]) / step_A for name, v in quantities.items()},
            {name: float(v[2] - v[0]) / step_K for name, v in quantities.items()},
        )


def _towards(value: float, target: float, time_constants: float) -> float:
    """First-order approach, exact once it is within a part in a billion."""
    moved = target + (value - target) * math.exp(-time_constants)
    return target if abs(moved - target) <= 1e-9 * max(abs(target), 1.0) else moved


def build_plant(bench: BenchFile, bench_path: Path, timebase: Timebase) -> Plant:
    """The plant of a bench file, with the board it names already in the fixture."""
    plant = Plant(bench, bench_path, timebase)
    if bench.simulated is not None and bench.simulated.stage is not None:
        plant.insert(bench.simulated.serial, str(bench_path.parent / bench.simulated.stage))
    return plant
