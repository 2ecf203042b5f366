"""Operating points a second, against ngspice on the same Monte Carlo, and what more of them cost.

    python -m tests.benchmarks.solver

2,000 boards of `pmos-sensed` within their tolerances at 20 currents each, through
``prediction.forward.forward``. ngspice (``tests.benchmarks.monte_carlo_spice``) is given the same
parameters and compiled devices of the same laws, and the faster of two forms counts: one circuit
altered 2,000 times, or many boards side by side in a circuit. Each side is timed from parameters
to drops, the best of several runs taken in turn; ngspice with its start and the reading of its
deck, without the writing of that deck. Then the cost of more points: time, and the largest memory
of a process of its own. The last line is a JSON object: ``ratio``, ``points_per_s``,
``ngspice_points_per_s``, ``worst_difference_V``, ``linear``.
"""

from __future__ import annotations

import json
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchkit.prediction.forward import forward
from benchkit.stage import Sample, Stage
from tests.benchkit.nine_stages import made
from tests.benchmarks.monte_carlo_spice import FORMS, MonteCarlo

Floats = NDArray[np.float64]

BOARDS, REPEATS = 2000, 5
CURRENTS_A: Floats = np.arange(1, 21) * np.float64(0.15)
SUPPLY_V, JUNCTION_C = 12.0, 25.0
SIZES = (1_000, 10_000, 100_000)


def ours(stage: Stage, sample: Sample) -> tuple[Floats, float]:
    """Drops of shape (boards, currents), and the seconds that they took."""
    begun = time.perf_counter()
    found = forward(stage, sample, CURRENTS_A, SUPPLY_V, JUNCTION_C)
    seconds = time.perf_counter() - begun
    assert found.residual.max() < 1e-9
    return found.drop_V, seconds


def compared(program: str, folder: Path, boards: int, repeats: int) -> dict[str, float | str]:
    """Both sides in turn, the best of ``repeats`` each."""
    stage = made("pmos-sensed")
    sample = stage.draw(boards, 1)
    spice = MonteCarlo(program, folder, sample, SUPPLY_V, CURRENTS_A)
    best = dict.fromkeys(("ours", *FORMS), np.inf)
    worst = 0.0
    for _ in range(repeats):
        drops, seconds = ours(stage, sample)
        best["ours"] = min(best["ours"], seconds)
        for form in FORMS:
            theirs, seconds = spice.drops(form)
            best[form] = min(best[form], seconds)
            worst = max(worst, float(np.abs(theirs - drops).max()))
    fastest = min(FORMS, key=lambda form: best[form])
    points = boards * CURRENTS_A.size
    return {
        "ratio": best[fastest] / best["ours"],
        "points_per_s": points / best["ours"],
        "ngspice_points_per_s": points / best[fastest],
        "ngspice_form": fastest,
        **{f"ngspice_points_per_s_{form}": points / best[form] for form in FORMS},
        "worst_difference_V": worst,
        "least_drop_V": float(drops.min()),
    }


def cost(points: int) -> dict[str, float]:
    """Seconds (best of three) and memory of one size, measured in this process."""
    stage = made("pmos-sensed")
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    sample = stage.draw(points // CURRENTS_A.size, 1)
    seconds = min(ours(stage, sample)[1] for _ in range(3))
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return {
        "points": points, "seconds": seconds, "microseconds_per_point": 1e6 * seconds / points,
        "peak_MB": after / 1024, "grown_by_MB": (after - before) / 1024,
    }  # fmt: skip


def costs() -> list[dict[str, float]]:
    """Every size in a process of its own."""
    lines = [
        subprocess.run(
            [sys.executable, "-m", "tests.benchmarks.solver", "--cost", str(points)],
            capture_output=True, text=True, check=True,
        ).stdout
        for points in SIZES
    ]  # fmt: skip
    return [json.loads(line) for line in lines]


def benchmark() -> dict[str, object]:
    """All of it."""
    program = shutil.which("ngspice")
    if program is None:
        raise SystemExit("ngspice is missing: apt-get install ngspice")
    with tempfile.TemporaryDirectory() as name:
        found = compared(program, Path(name), BOARDS, REPEATS)
    return {**found, "boards": BOARDS, "currents": CURRENTS_A.size, "linear": costs()}


if __name__ == "__main__":
    if sys.argv[1:2] == ["--cost"]:
        print(json.dumps(cost(int(sys.argv[2]))))
    else:
        print(json.dumps(benchmark()))
