"""Do the claimed 95 % intervals hold the truth in 95 % of boards?

    python -m tests.campaigns.coverage [BOARDS]

Each board is measured on a simulated bench of its own (another seed: other instrument errors,
another shunt, another fixture, another board) over its real sockets, with the same sweep and soak
as `verify`. The truth is asked from the bench's control port at the moment of each drop reading,
and for the thermal resistance at the end. The design wants 93 to 97 %. The last line is a JSON
object: ``boards``, ``intervals``, ``held``, ``share`` and the share by quantity.
"""

from __future__ import annotations

import json
import sys
import tempfile
from collections import defaultdict
from pathlib import Path
from statistics import median

from benchkit.reading import Reading
from instruments.bench import Bench
from procedures.commands import opened
from procedures.screen import Screen
from procedures.starters import place_starters
from procedures.verify import run_board
from tests.simulated_bench import inputs_of, without_trial

BOARDS = 200


class Truth:
    """Asks the bench for the true drop whenever a drop has been read in the sweep."""

    def __init__(self) -> None:
        self.bench: Bench | None = None
        self.drops: dict[float, list[float]] = defaultdict(list)

    def ask(self, name: str) -> float:
        assert self.bench is not None
        assert self.bench.control is not None
        return self.bench.control.ask_number(f':SIM:TRUT? "{name}"')


def measure(folder: Path, seed: int, stage: str) -> list[tuple[str, float, float, float]]:
    """One board: (quantity, measured, U, true)."""
    place_starters(folder, seed)
    without_trial(folder)
    inputs = inputs_of(folder, stage)
    truth = Truth()
    screen = Screen(quiet=True)
    with opened(inputs, screen) as bench:
        truth.bench = bench
        keep = bench.guard._keep

        def watch(reading: Reading) -> None:
            keep(reading)
            step = bench.guard._step
            if step.startswith("sweep/") and reading.point == "drop":
                target = float(step.rsplit("/", 1)[1])
                truth.drops[target].append(truth.ask(f"drop@{target!r}"))

        bench.guard._keep = watch  # type: ignore[method-assign]
        done = run_board(bench, inputs.job, "B-1", folder / "run", screen)
        assert done.error is None, done.error
        evaluation = done.evaluation
        found = [
            ("drop", d.drop_V, d.budget.expanded().U, sum(v) / len(v))
            for d in evaluation.drops
            if (v := truth.drops[d.current_A])
        ]
        soak = evaluation.soak
        if soak is not None and soak.heating.usable:
            true = truth.ask(f"thermal_resistance@{soak.late_loss_W!r}")
            expanded = soak.resistance_budget.expanded()
            found.append(("thermal resistance", soak.resistance_K_per_W, expanded.U, true))
    return found


def campaign(boards: int) -> dict[str, object]:
    """Measure boards of both stages in turn."""
    shares: dict[str, list[float]] = defaultdict(list)
    for number in range(boards):
        stage = ("stage.toml", "stage-diode.toml")[number % 2]
        with tempfile.TemporaryDirectory() as name:
            rows = measure(Path(name) / "w", 1000 + number, stage)
        for quantity, value, U, true in rows:
            shares[f"{quantity}, {stage}"].append(abs(value - true) / U)
    total = [share <= 1 for group in shares.values() for share in group]
    return {
        "boards": boards,
        "intervals": len(total),
        "held": sum(total),
        "share": round(sum(total) / len(total), 4),
        **{
            f"share of {name}": round(sum(share <= 1 for share in group) / len(group), 4)
            for name, group in shares.items()
        },
        **{f"median error over U of {n}": round(median(g), 3) for n, g in shares.items()},
    }


if __name__ == "__main__":
    print(json.dumps(campaign(int(sys.argv[1]) if len(sys.argv) > 1 else BOARDS)))
