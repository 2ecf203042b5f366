"""How much bench time a forward sweep takes beyond the settling and apertures it needs.

    python -m tests.benchmarks.sweep

Bench time is the simulated bench's own, so the figure does not depend on this machine. Needed is,
for each visit of a current, the settling time of the bench file and the apertures of the two
readings that are used. The last line is a JSON object with ``ratio``.
"""

from __future__ import annotations

import json
import tempfile
from pathlib import Path

from benchkit.files.bench import PointName
from tests.simulated_bench import measure, workshop

NEEDED: tuple[PointName, ...] = ("drop", "exposed_current")


def ratio() -> dict[str, float]:
    """Measure one sweep on the simulated bench."""
    with tempfile.TemporaryDirectory() as name:
        folder = workshop(Path(name) / "w")
        done, bench = measure(folder)
        assert done.error is None, done.error
        events = [
            json.loads(line)
            for line in (done.folder / "events.jsonl").read_text("utf-8").splitlines()
        ]
        steps = [e for e in events if e["kind"] == "step"]
        visits = [e for e in steps if e["text"].startswith("sweep/")]
        begun = visits[0]["time_s"]
        # A reading is stamped where it begins: the last one ends an aperture later.
        began = max(t for step, t in _currents(done.folder) if step == visits[-1]["text"])
        file = bench.file
        cycle = 1 / file.bench.line_frequency_Hz
        apertures = {p: file.points[p].aperture_nplc * cycle for p in NEEDED}
        whole = began + apertures["exposed_current"] - begun
        needed = len(visits) * (file.bench.settle_s + sum(apertures.values()))
    return {"ratio": whole / needed, "bench_s": whole, "needed_s": needed, "visits": len(visits)}


def _currents(folder: Path) -> list[tuple[str, float]]:
    rows = (folder / "readings.csv").read_text("utf-8").splitlines()[1:]
    fields = [row.split(",") for row in rows]
    return [(f[1], float(f[0])) for f in fields if f[2] == "exposed_current"]


if __name__ == "__main__":
    print(json.dumps(ratio()))
