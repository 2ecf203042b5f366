"""The true world behind the simulated instruments: circuit, heat, wiring and faults.

It solves the same kind of network as the prediction, but with what the prediction does not know:
this board's own parts, fixture and lead resistance, thermoelectric voltages, a shunt that is not
quite its nominal value, a supply and a load that take time to settle, and heat with more time
constants than any fit assumes.
"""

from __future__ import annotations

import math
import random
from pathlib import Path

from benchkit.errors import InputError
from benchkit.files import BenchFile
from benchkit.harness import DRAWING, Harness
from instruments.simulated.armed import (
    CONDUCTS_BACK,
    CROSSING_STUCK,
    LEAD_RESISTANCE,
    ArmedFaults,
)
from instruments.simulated.board import Board, make_board, seed_of
from instruments.simulated.circuit import Hookup, Moment, PortCircuit
from instruments.simulated.heat import LONGEST_STEP_S
from instruments.simulated.output import RegulatedOutput
from instruments.simulated.timebase import Timebase

LOAD_LAG_S = 0.003
LEAD_OHM = 0.018
LAWS_END_C = 250.0
"""The laws of the parts are not valid beyond; a real part would soon be dead."""
NEAR_K = 2.0
ROUNDING_S = 1e-6
HOT_V = 0.5
"""More than this at a port, and nobody should touch the leads."""
FLOATING_V = 0.0137


class Plant:
    """See ``instruments.simulated.world.World``."""

    def __init__(self, bench: BenchFile, bench_path: Path, timebase: Timebase) -> None:
        if bench.simulated is None:
            raise InputError(f"{bench_path}: has no [simulated] table, so it cannot be simulated")
        self._time = timebase
        self._settings = bench.simulated
        self._bleeder_ohm = bench.bench.bleeder_ohm
        draw = random.Random(seed_of(self._settings.seed, "wiring"))
        current, drop = bench.points["exposed_current"], bench.points["drop"]
        share = current.shunt_tolerance_percent / 100
        self._shunt = (current.shunt_ohm or 0.01) * (1 + draw.uniform(-share, share))
        self._fixture_ohm = max(
            0.0, drop.lead_ohm + draw.uniform(-drop.lead_tolerance_ohm, drop.lead_tolerance_ohm)
        )
        self._thermal_V_per_K = draw.uniform(-1, 1) * drop.thermoelectric_V_per_K
        self._faults = ArmedFaults()
        self._board: Board | None = None
        self._circuit: PortCircuit | None = None
        self._age_s = 0.0
        self._lived_until = timebase.now()
        self._output = RegulatedOutput()
        self._command_load = ("CURR", 0.0, False)
        self._amps = 0.0
        self._harness = DRAWING
        self._hot_rewirings = 0
        self._moment: Moment | None = None

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
        self._output.pass_time(seconds)
        self._amps = _towards(self._amps, self._target_amps(), seconds / LOAD_LAG_S)
        if self._board is not None:
            self._board.heat.pass_time(seconds, max(self._quantity("loss"), 0.0))

    def _target_amps(self) -> float:
        mode, value, drawing = self._command_load
        return value if drawing and mode == "CURR" else 0.0

    # World: what the instruments do

    def command_supply(self, voltage_V: float, current_A: float, on: bool) -> None:
        """Take the supply's new set-points."""
        self._catch_up()
        self._output.command(voltage_V, current_A, on)

    def command_load(self, mode: str, value: float, on: bool) -> None:
        """Take the load's new set-point."""
        self._catch_up()
        self._command_load = (mode, value, on)

    # World: what a person does

    def insert(self, serial: str, stage_path: str) -> None:
        """Put a board in, right way round; everything at ambient, board time 0."""
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
        self._circuit = PortCircuit(self._board)
        self._age_s = self._amps = 0.0
        self._output.restart()
        self._harness = DRAWING
        self._moment = None
        self._faults.arm_spelled(self._settings.faults)

    def wire(self, harness: Harness) -> None:
        """Connect supply and load otherwise; done with anything hot it is counted."""
        for name in ("supply", "load"):
            if harness.exposed == harness.guarded == name:
                raise ValueError(f"the {name} cannot be at both ports: the bench has one")
        if harness == self._harness:
            return
        ports = [abs(self._read(f"{port}_voltage")) for port in ("exposed", "guarded")]
        self._hot_rewirings += self._output.on or max(ports) > HOT_V
        if self.active(CROSSING_STUCK) is None:
            self._harness = harness

    @property
    def harness(self) -> Harness:
        """What is connected where."""
        return self._harness

    def fault(self, name: str, at_s: float, value: float) -> None:
        """Arm a fault of wiring, instrument or link."""
        self._faults.arm(name, at_s, value)

    def clear_faults(self) -> None:
        """Take every armed fault away."""
        self._faults.clear()

    def active(self, name: str) -> float | None:
        """The value of a fault whose time has come, or None."""
        return self._faults.active(name, self._age_s)

    # World: true quantities

    def supply_terminals(self) -> tuple[float, float, bool]:
        """True volts and amperes of the supply, and whether it limits its current."""
        amps = self._read("supply_current")
        limits = self._output.on and amps >= 0.999 * self._output.limit_A
        return self._read("supply_voltage"), amps, limits

    def load_terminals(self) -> tuple[float, float]:
        """True volts and amperes of the load."""
        return self._read("load_voltage"), self._read("load_current")

    def voltage(self, probe: str) -> float:
        """True volts between the two wires of a meter channel."""
        if self.active(f"lead-off:{probe}") is not None:
            return FLOATING_V
        if probe == "exposed_current":
            return self._read("exposed_current") * self._shunt
        if probe == "drop":
            board = self._board
            warm = board.heat.case_K if board else 0.0
            fixture = self._fixture_ohm * self._read("exposed_current")
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
        ``case_K``, ``junction_C``, ``hot_rewirings``, or a quantity of the circuit such as
        ``loss`` or ``gate_voltage``."""
        what, _, at = name.partition("@")
        board, circuit = self._board, self._circuit
        if what == "hot_rewirings":
            return float(self._hot_rewirings)
        if board is None or circuit is None:
            raise KeyError(name)
        if what == "drop" and at:
            return circuit.at(self._hookup(), float(at), self._junction()).values["drop"]
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
        if self._circuit is None:
            return self._empty(name)
        hookup, junction, moment = self._hookup(), self._junction(), self._moment
        if moment is None or moment.hookup != hookup or abs(junction - moment.junction_C) > NEAR_K:
            # At the current the load is going to: on the way there the straight line serves.
            moment = self._moment = self._circuit.at(hookup, self._target_amps(), junction)
        return moment.at(name, self._amps, junction)

    def _empty(self, name: str) -> float:
        """A quantity of a fixture with no board in it."""
        if name == "supply_voltage":
            return self._output.emf_V
        if name == "exposed_voltage" and self._harness.exposed == "supply":
            return self._harness.sign * self._output.emf_V
        return 0.0

    def _hookup(self) -> Hookup:
        output, lead = self._output, LEAD_OHM + (self.active(LEAD_RESISTANCE) or 0.0)
        return Hookup(
            self._harness, output.emf_V, output.limit_A, output.on, *self._command_load,
            self._shunt, lead, self.active(CONDUCTS_BACK) is not None,
            self._bleeder_ohm if self._harness.crossed else None,
        )  # fmt: skip


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
