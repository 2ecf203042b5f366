"""The bench's points: which instrument and route reads each, and what its reading is worth."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import cast

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile, Point, PointName, VoltageAccuracy
from benchkit.metrology.accuracy import Accuracy
from benchkit.reading import POINT_UNITS, Reading, Status
from instruments.errors import NotANumber, Overload
from instruments.meter import ScpiMeter
from instruments.thermometer import ScpiThermometer

QUICK_NPLC = 0.2
TICK_S = 1e-6
"""What a meter's timer is set in: an interval in between would drift over a long burst."""


@dataclass(frozen=True)
class _Armed:
    """A burst that one meter has begun."""

    meter: ScpiMeter
    points: tuple[str, ...]
    interval_s: float
    route_s: float


class BenchPoints:
    """Fulfils ``benchkit.protocols.Points`` with the instruments of a bench file."""

    def __init__(
        self,
        bench: BenchFile,
        meters: Mapping[str, ScpiMeter],
        thermometers: Mapping[str, ScpiThermometer],
    ) -> None:
        """InputError when the bench file declares a range its meter's dialect does not have."""
        self._bench, self._meters, self._thermometers = bench, meters, thermometers
        self._ranges: dict[str, Accuracy] = {}
        self._armed: list[_Armed] = []
        for name, meter in meters.items():
            strange = [a.range_V for a in self._declared(name) if a.range_V not in meter.ranges_V]
            if strange:
                raise InputError(
                    f"instruments.{name}.voltage declares range_V {strange[0]:g}, but its dialect "
                    f"knows the ranges {', '.join(f'{r:g}' for r in meter.ranges_V)}"
                )
        self.forget()
        for point, table in bench.points.items():
            if table.instrument in meters:
                apertures = meters[table.instrument].apertures_nplc
                if table.aperture_nplc not in apertures:
                    raise InputError(
                        f"points.{point}.aperture_nplc is {table.aperture_nplc:g}; the dialect of "
                        f"{table.instrument} knows {', '.join(f'{a:g}' for a in apertures)}"
                    )

    def names(self) -> tuple[str, ...]:
        """Which points this bench can read."""
        return tuple(self._bench.points)

    def expect(self, point: str, largest: float) -> None:
        """Fix the smallest declared range that holds ``largest`` (the largest there is, else)."""
        table = self._table(point)
        volts = largest * (table.shunt_ohm or 1.0)
        declared = sorted(self._declared(table.instrument), key=lambda a: a.range_V)
        chosen = next((a for a in declared if a.range_V >= volts), declared[-1])
        self._ranges[point] = Accuracy(chosen.range_V, chosen.reading_percent, chosen.range_percent)

    def read(self, point: str, time_s: float, *, quick: bool = False) -> Reading:
        """One reading; overload and not-a-number become its status, never a value."""
        table = self._table(point)
        if table.instrument in self._thermometers:
            return self._temperature(point, time_s)
        meter = self._meters[table.instrument]
        accuracy = self._ranges[point]
        nplc = table.aperture_nplc
        if quick:
            nplc = next((a for a in meter.apertures_nplc if a >= QUICK_NPLC), nplc)
        meter.configure(table.route, accuracy.range, nplc)
        status: Status = "ok"
        volts = math.nan
        try:
            volts = meter.read(table.route)
        except Overload:
            status = "overload"
        except NotANumber:
            status = "invalid"
        return self._reading(point, time_s, volts, status)

    def _worth(self, point: str, time_s: float, volts: float) -> Reading:
        """A reading of a burst: infinite where it overloaded."""
        if math.isinf(volts):
            return self._reading(point, time_s, math.nan, "overload")
        return self._reading(point, time_s, volts, "invalid" if math.isnan(volts) else "ok")

    def _reading(self, point: str, time_s: float, volts: float, status: Status) -> Reading:
        """What the volts of a meter are worth at a point."""
        table, accuracy = self._table(point), self._ranges[point]
        u = accuracy.standard_uncertainty(volts)
        value = volts
        if table.shunt_ohm is not None:
            value, u = volts / table.shunt_ohm, u / table.shunt_ohm
            u = math.hypot(u, value * table.shunt_tolerance_percent / 100 / math.sqrt(3))
        return Reading(time_s, point, value, POINT_UNITS[point], u, accuracy.range, status)

    def forget(self) -> None:
        """Largest ranges, and every setting sent anew when it is next needed."""
        for meter in self._meters.values():
            meter.forget()
        for point, table in self._bench.points.items():
            if table.instrument in self._meters:
                self.expect(point, math.inf)

    def can_burst(self, points: Sequence[str]) -> str | None:
        """See Points. Points of one meter need a scanner."""
        for point in points:
            table = self._bench.points.get(cast("PointName", point))
            if table is None:
                return f"points.{point} is not in the bench file"
            meter = self._meters[table.instrument]
            if not meter.can_burst:
                return f"the dialect of {table.instrument} has no [burst]"
        return None

    def arm_burst(self, points: Sequence[tuple[str, float]], seconds: float) -> None:
        """See Points. Every meter among them is armed in turn, a message apart."""
        self._armed = []
        for point, largest in points:
            self.expect(point, largest)
        for name, meter in self._meters.items():
            mine = [point for point, _ in points if self._table(point).instrument == name]
            if not mine:
                continue
            requests = meter.dialect.burst
            if requests is None:
                raise InputError(f"the dialect of {name} has no [burst]")
            # A long burst is spread thinner: a meter keeps only so many.
            most = requests.most - 1
            interval_s = max(meter.shortest_interval_s(len(mine)), seconds / most)
            interval_s = math.ceil(interval_s / TICK_S - 1e-6) * TICK_S
            scans = min(math.ceil(seconds / interval_s) + 1, requests.most)
            routes = [self._table(point).route for point in mine]
            ranges = [self._ranges[point].range for point in mine]
            meter.arm_burst(routes, ranges, scans, interval_s)
            self._armed.append(_Armed(meter, tuple(mine), interval_s, requests.route_s))

    def fetch_burst(self, began_s: float) -> list[Reading]:
        """See Points; in the order of time, each at the moment its aperture opened."""
        readings: list[Reading] = []
        armed, self._armed = self._armed, []
        for burst in armed:
            for number, scan in enumerate(burst.meter.fetch_burst()):
                for place, (point, volts) in enumerate(zip(burst.points, scan, strict=True)):
                    at = began_s + number * burst.interval_s + place * burst.route_s
                    readings.append(self._worth(point, round(at, 6), float(volts)))
        return sorted(readings, key=lambda reading: reading.time_s)

    def recover(self, point: str) -> None:
        """Bring the instrument that reads a point back into step, if it is out of it."""
        name = self._table(point).instrument
        (self._meters.get(name) or self._thermometers[name]).recover()

    def _temperature(self, point: str, time_s: float) -> Reading:
        table = self._table(point)
        declared = self._bench.instruments[table.instrument].temperature
        assert declared is not None
        status: Status = "ok"
        value = math.nan
        try:
            value = self._thermometers[table.instrument].read(table.route)
        except NotANumber:
            status = "invalid"
        limits = Accuracy(100.0, declared.reading_percent, 0.0, declared.offset_K)
        return Reading(time_s, point, value, "C", limits.standard_uncertainty(value), 0.0, status)

    def _table(self, point: str) -> Point:
        return self._bench.points[cast("PointName", point)]

    def _declared(self, instrument: str) -> list[VoltageAccuracy]:
        return self._bench.instruments[instrument].voltage
