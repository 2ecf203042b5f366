"""How long the instruments of a bench may keep the guard from looking."""

from __future__ import annotations

from collections.abc import Mapping

from benchkit.files.bench import BenchFile, PointName
from instruments.dialects import MeterDialect
from instruments.dialects.tables import Dialect, Kind
from instruments.meter import SLOWEST_MAINS_HZ
from instruments.opening import supplies_of


def longest_waits_s(file: BenchFile, dialects: Mapping[str, Dialect]) -> float:
    """What instruments may take, at most, from a look being due until it is done and output-off
    is sent, in seconds: every answer comes at the end of its timeout.

    One operation of a procedure that had just begun (a point configured and read, or the load
    set), then the look at supply, case and one voltage, then a lost connection to the supply that
    is opened again, twice, before output-off gets through. Emptying an error queue that an
    instrument has filled counts as one answer.
    """

    def allowed(name: str, *kinds: Kind) -> float:
        link = dialects[name].link
        return sum(link.timeout(kind) + link.gap_s for kind in kinds)

    supplies = [name for name, _ in supplies_of(file).values()]
    operations = [allowed(name, "set") for name in (file.only("load")[0], *supplies)]
    for point in file.points.values():
        meter = dialects[point.instrument]
        if isinstance(meter, MeterDialect):
            aperture_s = meter.reading.apertures * point.aperture_nplc / SLOWEST_MAINS_HZ
            # A burst that was not fetched is ended by one setting more.
            ended: list[Kind] = ["set"] if meter.burst is not None else []
            operations.append(allowed(point.instrument, "set", "read", *ended) + aperture_s)
        else:
            operations.append(allowed(point.instrument, "read"))
    look = allowed(file.points["case"].instrument, "read")
    look += sum(allowed(name, "read") for name in supplies)
    if file.wiring is not None and file.wiring.loop is not None:
        look += allowed(file.wiring.instrument, "read")
    voltages: tuple[PointName, ...] = ("guarded_voltage", "exposed_voltage")
    look += max(allowed(file.points[p].instrument, "set", "read") for p in voltages)
    return max(operations) + look + 2 * sum(dialects[name].link.open_s for name in supplies)
