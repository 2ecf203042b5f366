"""The true world behind the simulated instruments: circuit, heat, wiring and faults.

It solves the same kind of network as the prediction, but with what the prediction does not know:
this board's own parts, fixture and lead resistance, thermoelectric voltages, a shunt that is not
quite its nominal value, a supply and a load that take time to settle, and heat with more time
constants than any fit assumes.
"""

from __future__ import annotations

import random
from pathlib import Path

from benchkit.errors import InputError
from benchkit.files import BenchFile
from benchkit.harness import Harness, Source
from instruments.simulated.armed import (
    CONDUCTS_BACK,
    CROSSING_STUCK,
    LOOP_OPEN,
    ArmedFaults,
)
from instruments.simulated.board import make_board, seed_of
from instruments.simulated.drives import Drives
from instruments.simulated.heat import LONGEST_STEP_S
from instruments.simulated.hookup import Hookup
from instruments.simulated.leads import Leads
from instruments.simulated.mounted import Mounted, State
from instruments.simulated.timebase import Timebase

ROUNDING_S = 1e-6
SHORTEST_STEP_S = 1e-9
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
        draw = random.Random(seed_of(self._settings.seed, "wiring"))
        current, drop = bench.points["exposed_current"], bench.points["drop"]
        share = current.shunt_tolerance_percent / 100
        self._shunt = (current.shunt_ohm or 0.01) * (1 + draw.uniform(-share, share))
        self._fixture_ohm = max(
            0.0, drop.lead_ohm + draw.uniform(-drop.lead_tolerance_ohm, drop.lead_tolerance_ohm)
        )
        self._thermal_V_per_K = draw.uniform(-1, 1) * drop.thermoelectric_V_per_K
        self._faults = ArmedFaults()
        self._drives, self._leads = Drives(bench), Leads(bench)
        self._loop = bench.wiring.loop if bench.wiring is not None else None
        self._mounted: Mounted | None = None
        self._lived_until = timebase.now()
        self._hot_rewirings = 0

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
            left -= self._live(left)
        if self._mounted is not None:
            self._mounted.age_s += seconds

    def _live(self, at_most_s: float) -> float:
        """Live through one step, and say how long it was.

        Where a fate hangs on the moment, the currents at its beginning hold for a step in which
        they do not change; elsewhere the state at its end holds for the whole of it.
        """
        mounted, drives, step = self._mounted, self._drives, min(at_most_s, LONGEST_STEP_S)
        if mounted is None:
            drives.pass_time(step)
            return step
        wear = mounted.board.wear
        if wear.fine:
            state = self._state(mounted)
            fitting = min(drives.steady_s(), wear.step_s(*mounted.currents(state)))
            step = min(step, max(fitting, SHORTEST_STEP_S))
            mounted.wear(step, state)
        drives.pass_time(step)
        state = self._state(mounted)
        if not wear.fine:
            mounted.wear(step, state)
        mounted.board.heat.pass_time(step, max(state.value("loss"), 0.0))
        return step

    # World: what the instruments do

    def command_supply(self, source: Source, voltage_V: float, current_A: float, on: bool) -> None:
        """Take a supply's new set-points."""
        self._catch_up()
        self._drives.outputs[source].command(voltage_V, current_A, on)

    def command_load(self, mode: str, value: float, on: bool) -> None:
        """Take the load's new set-point."""
        self._catch_up()
        self._drives.load = (mode, value, on)

    # World: what a person does

    def insert(self, serial: str, stage_path: str) -> None:
        """Put a board in, right way round; everything at ambient, board time 0."""
        self._lived_until = self.now()
        try:
            board = make_board(
                Path(stage_path),
                serial,
                self._settings.seed,
                self._settings.boards.get(serial, []),
                self._settings.ambient_C,
            )
        except InputError as error:
            raise ValueError(str(error)) from None
        self._mounted = Mounted(board)
        self._drives.restart()
        self._leads.restart(self._leads.normal(board.stage))
        self._faults.arm_spelled(self._settings.faults)

    def wire(self, harness: Harness) -> None:
        """Connect the instruments otherwise; done with anything hot it is counted."""
        self._leads.check(harness)
        if harness == self._leads.by_hand:
            return
        self._count_hot()
        if self.active(CROSSING_STUCK) is None:
            self._leads.wire(harness)

    def refit(self, reference: str) -> None:
        """Put a new fuse in; done with anything hot it is counted."""
        if self._mounted is None:
            raise ValueError("there is no board in the fixture")
        self._mounted.refit(reference)
        self._count_hot()

    def relay(self, route: str, closed: bool) -> None:
        """Open or close a route of the switch unit; a relay moved hot is counted too."""
        if self._leads.moves(route, closed):
            self._count_hot()
            self._leads.relay(route, closed)

    def _count_hot(self) -> None:
        ports = [abs(self._read(f"{port}_voltage")) for port in ("exposed", "guarded")]
        on = any(output.on for output in self._drives.outputs.values())
        self._hot_rewirings += on or max(ports) > HOT_V

    def line(self, name: str) -> bool:
        """Whether a digital input is high."""
        return name == self._loop and self.active(LOOP_OPEN) is None

    @property
    def harness(self) -> Harness:
        """What is connected where, through leads and relays."""
        return self._leads.connected

    def fault(self, name: str, at_s: float, value: float) -> None:
        """Arm a fault of wiring, instrument or link."""
        self._faults.arm(name, at_s, value)

    def clear_faults(self) -> None:
        """Take every armed fault away."""
        self._faults.clear()

    def active(self, name: str) -> float | None:
        """The value of a fault whose time has come, or None."""
        return self._faults.active(name, self._age_s)

    @property
    def _age_s(self) -> float:
        return self._mounted.age_s if self._mounted is not None else 0.0

    # World: true quantities

    def supply_terminals(self, source: Source) -> tuple[float, float, bool]:
        """True volts and amperes of a source, and whether it limits its current."""
        amps, output = self._read(f"{source}_current"), self._drives.outputs[source]
        limits = output.on and amps >= 0.999 * output.limit_A
        return self._read(f"{source}_voltage"), amps, limits

    def load_terminals(self) -> tuple[float, float]:
        """True volts and amperes of the load."""
        return self._read("load_voltage"), self._read("load_current")

    def voltage(self, probe: str) -> float:
        """True volts between the two wires of a meter channel."""
        if self.active(f"lead-off:{probe}") is not None:
            return FLOATING_V
        if probe == "exposed_current":
            return self._read("exposed_current") * self._shunt
        mounted = self._mounted
        if probe == "drop":
            warm = mounted.board.heat.case_K if mounted else 0.0
            fixture = self._fixture_ohm * self._read("exposed_current")
            return self._read("drop") + fixture + self._thermal_V_per_K * warm
        if probe == "gate_voltage" and (mounted is None or mounted.board.stage.gate_nodes is None):
            return FLOATING_V
        return self._read(probe)

    def temperature(self, probe: str) -> float | None:
        """True degrees Celsius at a sensor; None when it is open."""
        if self.active(f"sensor-open:{probe}") is not None:
            return None
        mounted = self._mounted
        if mounted is None:
            return self._settings.ambient_C
        return mounted.ambient_C + (mounted.board.heat.sensor_K if probe == "case" else 0.0)

    def truth(self, name: str) -> float:
        """For campaigns; KeyError for a name that the board or the bench has nothing for.

        Of the bench: ``hot_rewirings``, ``relay_shorts``. Of the board: ``drop@3.0`` (V at 3 A,
        now), ``thermal_resistance@0.5`` (K/W at 0.5 W), ``case_K``, ``junction_C``, ``part_dead``
        (0 or 1), and of its fuse ``fuse_open`` (0 or 1), ``fuse_cleared_s`` (s from the current's
        rise above the opening current until it was open; not a number before) and ``fuse_A2s``
        (let through in that time; so far, before); with several, ``fuse_open:F2``. Or a quantity
        of the circuit, such as ``loss``, ``gate_voltage``, ``battery_current``.
        """
        if name == "hot_rewirings":
            return float(self._hot_rewirings)
        if name == "relay_shorts":
            return float(self._leads.shorts)
        mounted = self._mounted
        if mounted is None:
            raise KeyError(name)
        self._catch_up()
        known = mounted.truth(name, self._hookup())
        return self._read(name) if known is None else known

    def _read(self, name: str) -> float:
        self._catch_up()
        mounted = self._mounted
        if mounted is None:
            return self._empty(name)
        return self._state(mounted, looked_at=True).value(name)

    def _state(self, mounted: Mounted, *, looked_at: bool = False) -> State:
        drives = self._drives
        return mounted.state(self._hookup(), drives.target_A, drives.amps, looked_at=looked_at)

    def _empty(self, name: str) -> float:
        """A quantity of a fixture with no board in it."""
        what, _, quantity = name.partition("_")
        if quantity != "voltage":
            return 0.0
        outputs = self._drives.outputs
        for source, output in outputs.items():
            if source == what:
                return output.emf_V
        held = [outputs[s].emf_V for s, port in self.harness.sources() if port == what]
        return max(held, default=0.0) * (self.harness.sign if what == "exposed" else 1)

    def _hookup(self) -> Hookup:
        leads, faults, age = self._leads, self._faults, self._age_s
        return Hookup(
            faults.connected(leads.connected, age), leads.shorted,
            self._drives.feeds(faults, age), *self._drives.load,
            self.active(CONDUCTS_BACK) is not None, self._shunt,
        )  # fmt: skip


def build_plant(bench: BenchFile, bench_path: Path, timebase: Timebase) -> Plant:
    """The plant of a bench file, with the board it names already in the fixture."""
    plant = Plant(bench, bench_path, timebase)
    if bench.simulated is not None and bench.simulated.stage is not None:
        plant.insert(bench.simulated.serial, str(bench_path.parent / bench.simulated.stage))
    return plant
