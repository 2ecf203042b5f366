"""Does the solver find an operating point of any stage that somebody may wire?

    python -m tests.campaigns.solver [STAGES] [SEED]

Random stages (``tests.campaigns.random_stages``): half of them the nine topologies in turn, with
and without the parts that they can do without, half of them two to eight parts between any nodes.
Each goes through all eight scenarios as `predict` does, circuit by circuit from everything at zero
volts, and through normal use once more in plain Newton steps from zero. Solved means: residual
below 1e-9 of the largest branch current; or the solver's own words say that there is no operating
point, because a constant-current load is cut off. The last line is a JSON object: ``stages``,
``solutions``, ``unsolved``, ``no_point``, ``worst_residual`` (of the settled), ``left_over_A``
(Kirchhoff's law summed up once more outside the solver: the largest current beyond 1e-9 of the
largest branch current, in which the last bits of hundreds of volts at milliohms are counted),
``unsolved`` by kind, and seconds.
"""

from __future__ import annotations

import json
import sys
import time
from collections import Counter
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import Network, Solution, network, solve
from benchkit.circuit.network import GROUND, terminal_currents
from benchkit.circuit.no_point import reason, without_point
from benchkit.circuit.solver import TOLERANCE
from benchkit.prediction.connections import SCENARIOS
from tests.campaigns.random_stages import Draw, RandomStage, topology_of

STAGES = 5000
OF_TOPOLOGY, OF_NETWORK = 40, 10
"""Sets of parameters of one structure, solved as one batch."""


@dataclass
class Tally:
    """What has been solved so far."""

    stages: int = 0
    solutions: int = 0
    unsolved: Counter[str] = field(default_factory=Counter)
    no_point: Counter[str] = field(default_factory=Counter)
    failures: list[str] = field(default_factory=list)
    worst_residual: float = 0.0
    left_over_A: float = 0.0
    most_iterations: int = 0

    def add(self, key: str, where: str, circuit: Network, solution: Solution) -> None:
        """One batch."""
        cut_off = without_point(circuit, solution)
        unsolved = ~solution.settled & ~cut_off
        sound = solution.settled
        self.solutions += cut_off.size
        self.no_point[key] += int(cut_off.sum())
        self.unsolved[key] += int(unsolved.sum())
        self.most_iterations = max(self.most_iterations, solution.iterations)
        if sound.any():
            self.worst_residual = max(self.worst_residual, float(solution.residual[sound].max()))
            left = float(left_over(circuit, solution)[sound].max())
            self.left_over_A = max(self.left_over_A, left)
        for entry in np.flatnonzero(~solution.settled):
            words = reason(circuit, solution, int(entry))
            assert words, "what is not settled has a reason in words"
            if unsolved[entry]:
                self.failures.append(f"{where}, entry {entry}: {words}")


def left_over(circuit: Network, solution: Solution) -> NDArray[np.float64]:
    """Kirchhoff's law outside the solver: amperes beyond TOLERANCE of the largest current."""
    sums: dict[str, NDArray[np.float64]] = {}
    largest = np.full(solution.residual.shape, 1e-9)
    for element in circuit.elements:
        for node, amps in zip(
            element.nodes, terminal_currents(element, solution.volts), strict=True
        ):
            sums[node] = sums.get(node, 1e-12 * solution.volts[node]) + amps
            largest = np.maximum(largest, np.abs(amps))
    free = [np.abs(sums[node]) for node in sums if node != GROUND and node not in circuit.held]
    worst = np.max(free, axis=0) if free else np.zeros(largest.shape)
    return np.maximum(worst - TOLERANCE * largest, 0.0)


def through(stage: RandomStage, draw: Draw, where: str, tally: Tally) -> None:
    """All eight scenarios of one structure."""
    around, at = draw.around(), draw.conditions()
    kind = "networks" if stage.name == "network" else "topologies"
    for name, steps in SCENARIOS.items():
        volts = None
        for number, connection in enumerate(steps(stage.as_stage(), around, at)):
            circuit = network([*stage.elements, *connection.exposed, *connection.guarded])
            solution = solve(circuit, draw.batch, volts, follow=True)
            volts = solution.volts
            tally.add(f"{kind}, {name}", f"{where}, {name}, {number}", circuit, solution)
        if name == "right-way":
            plain = solve(circuit, draw.batch)
            tally.add(f"{kind}, {name} plainly", f"{where}, {name} plainly", circuit, plain)
    tally.stages += draw.batch


def campaign(stages: int, seed: int = 0) -> dict[str, object]:
    """Solve at least ``stages`` stages, half of them topologies."""
    begun, tally, number = time.perf_counter(), Tally(), 0
    with np.errstate(divide="raise", over="raise", invalid="raise"):
        while tally.stages < stages:
            structure = (seed, number)
            of_network = number % (1 + OF_TOPOLOGY // OF_NETWORK) > 0
            draw = Draw(structure, OF_NETWORK if of_network else OF_TOPOLOGY)
            turn = number // (1 + OF_TOPOLOGY // OF_NETWORK)
            stage = draw.of_network() if of_network else draw.of_topology(topology_of(turn))
            through(stage, draw, f"structure {structure}, {stage.name}", tally)
            number += 1
    for failure in tally.failures:
        print(failure)
    return {
        "stages": tally.stages, "structures": number, "solutions": tally.solutions,
        "unsolved": tally.unsolved.total(), "no_point": tally.no_point.total(),
        "worst_residual": tally.worst_residual, "left_over_A": tally.left_over_A,
        "most_iterations": tally.most_iterations,
        "unsolved_by_kind": {key: n for key, n in tally.unsolved.items() if n},
        "no_point_by_kind": {key: n for key, n in tally.no_point.items() if n},
        "seconds": round(time.perf_counter() - begun, 1),
    }  # fmt: skip


if __name__ == "__main__":
    given = [int(value) for value in sys.argv[1:]]
    print(json.dumps(campaign(given[0] if given else STAGES, *given[1:2])))
