"""The simulated bench with somebody who writes down what is truly so, as it happens.

``python -m tests.campaigns.faults_world BENCH --virtual`` serves it as the real one is. Truths
beside those of ``Plant.truth``: ``outputs_on``, how many outputs are closed, and ``witnessed``,
which writes the rows since the last board was put in beside the bench file (``WITNESSED``) and
gives their number.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

from benchkit.circuit import Network, Solution, solve
from benchkit.files.bench import BenchFile
from benchkit.harness import Source
from instruments.simulated import mounted
from instruments.simulated.__main__ import main
from instruments.simulated.armed import LOOP_OPEN
from instruments.simulated.circuit import PortCircuit
from instruments.simulated.hookup import Hookup
from instruments.simulated.leads import SENSED_TOPOLOGIES
from instruments.simulated.plant import Plant
from instruments.simulated.timebase import Timebase

WITNESSED = "witnessed.npy"
COLUMNS = (
    "at_s", "wall_s", "age_s", "supply_on", "battery_on",
    "supply_voltage", "supply_current", "battery_voltage", "battery_current",
    "exposed_voltage", "guarded_voltage", "drop", "exposed_current", "gate_voltage",
    "case", "ambient", "loop_open",
)  # fmt: skip
"""Of a row. exposed_current and drop: as a perfect meter would have them from the fixture, on the
true shunt; case and ambient: at the sensors, whether they are open or not."""
QUANTITIES = COLUMNS[COLUMNS.index("supply_voltage") : COLUMNS.index("gate_voltage") + 1]


class QuickCircuit(PortCircuit):
    """Goes straight to the operating point of a stage that has no more than one, where the plant
    follows the circuit on its way there, which takes most of its time."""

    def _solved(self, circuit: Network, hookup: Hookup) -> Solution:
        if self._board.stage.file.stage.topology not in SENSED_TOPOLOGIES:
            solution = solve(circuit, 3, start=self._volts)
            if solution.settled.all():
                return solution
        return super()._solved(circuit, hookup)


class WitnessPlant(Plant):
    """Writes a row at the end of every piece of time, and whenever an output is switched."""

    def __init__(self, bench: BenchFile, path: Path, timebase: Timebase) -> None:
        self._beside = path.with_name(WITNESSED)
        self._rows: list[tuple[float, ...]] = []
        self._within_s = 0.0
        vars(mounted)["PortCircuit"] = QuickCircuit
        super().__init__(bench, path, timebase)

    def _live_through(self, seconds: float) -> None:
        self._within_s = 0.0
        super()._live_through(seconds)
        self._within_s = 0.0

    def _live(self, at_most_s: float) -> float:
        step = super()._live(at_most_s)
        self._within_s += step
        self._write()
        return step

    def command_supply(self, source: Source, voltage_V: float, current_A: float, on: bool) -> None:
        """And say so."""
        was = self._drives.outputs[source].on
        super().command_supply(source, voltage_V, current_A, on)
        if on != was:
            self._write()

    def insert(self, serial: str, stage_path: str) -> None:
        """And begin anew."""
        super().insert(serial, stage_path)
        self._rows.clear()

    def truth(self, name: str) -> float:
        """Those of the plant, and some more."""
        if name == "outputs_on":
            return float(sum(output.on for output in self._drives.outputs.values()))
        if name == "witnessed":
            np.save(self._beside, np.array(self._rows).reshape(-1, len(COLUMNS)))
            return float(len(self._rows))
        return super().truth(name)

    def _write(self) -> None:
        board, outputs = self._mounted, self._drives.outputs
        if board is None:
            return
        state, battery = self._state(board), outputs.get("battery")
        values = [state.value(q) if self._has(q) else float("nan") for q in QUANTITIES]
        heat = board.board.heat
        self._rows.append((
            self._lived_until + self._within_s, time.monotonic(),
            self._age_s + self._within_s,
            outputs["supply"].on, battery is not None and battery.on, *values,
            board.ambient_C + heat.sensor_K, board.ambient_C,
            self.active(LOOP_OPEN) is not None,
        ))  # fmt: skip

    def _has(self, quantity: str) -> bool:
        board = self._mounted
        if quantity == "gate_voltage":
            return board is not None and board.board.stage.gate_nodes is not None
        return "battery" in self._drives.outputs or not quantity.startswith("battery")


if __name__ == "__main__":
    sys.exit(main(build=WitnessPlant))
