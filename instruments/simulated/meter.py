"""The simulated voltmeter, with and without a scanner in front of it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile
from instruments.simulated.burst import Burst
from instruments.simulated.core import Core, error_generator, noise_generator
from instruments.simulated.parameters import Channels, Limit, Number
from instruments.simulated.scpi import Device
from instruments.simulated.tree import Entry

APERTURES = (0.02, 0.2, 1.0, 2.0, 10.0, 100.0)
DEFAULT_APERTURE = 1.0
OVERLOAD = "9.9E37"
RESOLUTION = 1e-8
"""Of the range: the last digit of a converter of 26 bits; what is the same to rounding reads the
same."""
OVER_RANGE = 1.2
"""A value beyond this many times the range is an overload."""
ROUTING_S = 0.0005
BURST_STEP_S = 0.001
"""From one channel of a scan to the next in a burst, with the shortest aperture."""
BURST_SAMPLE_S = 0.0005
"""The same for a meter that has one input: its fastest pace."""
FIRST_CHANNEL, LAST_CHANNEL = 101, 120
NOISE_OF_RANGE = 1e-6
NOISE_FLOOR_V = 0.3e-6


def probes(bench: BenchFile, name: str) -> dict[int | None, str]:
    """Which bench point each channel of an instrument reads; channel None is "no route"."""
    found: dict[int | None, str] = {}
    for point, wiring in bench.points.items():
        if wiring.instrument != name:
            continue
        try:
            channel = None if wiring.route is None else int(wiring.route)
        except ValueError:
            raise InputError(
                f"points.{point}.route is {wiring.route!r}: the simulated instruments number "
                'their channels, so it must be a number such as "101"'
            ) from None
        found.setdefault(channel, point)
    return found


@dataclass(slots=True)
class _Input:
    range_V: float
    aperture: float = DEFAULT_APERTURE


class Meter(Device):
    """Volts DC in fixed ranges: those of the bench file, with errors drawn within its accuracy.

    Noise has a standard deviation of (1e-6 range + 0.3 µV)/√NPLC, the two parts being
    independent. A reading takes its aperture of bench time. A channel that no point uses is
    short-circuited: it reads the meter's own offset.
    """

    burst_step_s = BURST_SAMPLE_S
    routing_s = 0.0

    def __init__(self, core: Core, name: str, bench: BenchFile) -> None:
        table = bench.instruments[name]
        self._probes = probes(bench, name)
        self._line_Hz = float(bench.bench.line_frequency_Hz)
        self._errors: dict[float, tuple[float, float]] = {}
        generator = error_generator(core.seed, name)
        for accuracy in sorted(table.voltage, key=lambda item: item.range_V):
            gain = generator.uniform(-1, 1) * accuracy.reading_percent / 100
            offset = generator.uniform(-1, 1) * accuracy.range_percent / 100 * accuracy.range_V
            self._errors[accuracy.range_V] = (1 + gain, offset)
        self._ranges = tuple(self._errors)
        self._burst = Burst(
            core,
            self.burst_channels(),
            self.burst_step_s,
            self.routing_s,
            lambda channel: self._input(channel).aperture / self._line_Hz,
            self._reading,
        )
        super().__init__(core, name, table.identity)
        self.reset()
        self.inserted()
        core.insertions.append(self.inserted)

    def reset(self) -> None:
        """*RST: every channel in the highest range at 1 NPLC."""
        self._inputs: dict[int | None, _Input] = {}
        self._burst.preset()

    def inserted(self) -> None:
        """A board was put into the fixture: the noise starts anew, a burst ends."""
        self._burst.abort()
        self._noise = noise_generator(self.core.seed, self.name, self.core.serial)

    def burst_channels(self) -> Sequence[int | None]:
        """The channels of a burst before any were listed."""
        return ()

    def read(self, channel: int | None) -> str:
        """Let the aperture pass and return the reading as a response; READ? ends a burst."""
        self._burst.abort()
        self.core.elapse(self._input(channel).aperture / self._line_Hz)
        return self._reading(channel)

    def _reading(self, channel: int | None) -> str:
        setup = self._input(channel)
        probe = self._probes.get(channel)
        true = 0.0 if probe is None else self.core.world.voltage(probe)
        factor, offset = self._errors[setup.range_V]
        root = math.sqrt(setup.aperture)
        deviation = math.hypot(NOISE_OF_RANGE * setup.range_V, NOISE_FLOOR_V) / root
        value = true * factor + offset + self._noise.gauss(0.0, deviation)
        if abs(value) > OVER_RANGE * setup.range_V:
            return OVERLOAD if value > 0 else "-" + OVERLOAD
        step = RESOLUTION * setup.range_V
        return f"{round(value / step) * step:.8E}"

    def _input(self, channel: int | None) -> _Input:
        found = self._inputs.get(channel)
        if found is None:
            found = self._inputs[channel] = _Input(self._ranges[-1])
        return found

    def _configure(self, expected: float | None, channels: Sequence[int | None]) -> None:
        """CONFigure presets everything: the smallest range that holds the value, 1 NPLC, and one
        reading at once, so that a burst is over."""
        self._burst.preset()
        self._preset(expected, channels)

    def _preset(self, expected: float | None, channels: Sequence[int | None]) -> None:
        size = self._ranges[-1] if expected is None else abs(expected)
        for channel in channels:
            range_V = next(r for r in self._ranges if r >= size * (1 - 1e-9))
            self._inputs[channel] = _Input(range_V)

    def _set_range(self, expected: float, channels: Sequence[int | None]) -> None:
        for channel in channels:
            aperture = self._input(channel).aperture
            self._preset(expected, [channel])
            self._inputs[channel].aperture = aperture

    def _set_aperture(self, value: float, channels: Sequence[int | None]) -> None:
        for channel in channels:
            self._input(channel).aperture = value

    def _range_number(self, optional: bool) -> Number:
        top = self._ranges[-1]
        return Number(-top, top, top, "V", optional=optional)

    def _aperture_number(self) -> Number:
        return Number(APERTURES[0], APERTURES[-1], DEFAULT_APERTURE, steps=APERTURES)


class ScanMeter(Meter):
    """``meter-scan``: channels 101 to 120 by list; each channel has its own range and aperture,
    and going to it takes 0.5 ms."""

    burst_step_s = BURST_STEP_S
    routing_s = ROUTING_S

    def table(self) -> list[Entry]:
        """The commands with a channel list."""
        named = [channel for channel in self._probes if channel is not None]
        allowed = frozenset((*range(FIRST_CHANNEL, LAST_CHANNEL + 1), *named))
        channels = Channels(allowed)
        sense = "[:SENSe]:VOLTage[:DC]"
        return [
            Entry("CONFigure:VOLTage[:DC]", self._configure, (self._range_number(True), channels)),
            Entry(f"{sense}:RANGe[:UPPer]", self._set_range, (self._range_number(False), channels)),
            Entry(f"{sense}:RANGe[:UPPer]?", self._ranges_of, (channels,)),
            Entry(f"{sense}:NPLCycles", self._set_aperture, (self._aperture_number(), channels)),
            Entry(f"{sense}:NPLCycles?", self._apertures_of, (channels,)),
            Entry("READ?", self._scan, (channels,)),
            Entry("ROUTe:SCAN", self._burst.list_channels, (channels,)),
            *self._burst.entries("TRIGger[:SEQuence]"),
        ]

    def _scan(self, channels: Sequence[int]) -> str:
        readings = []
        for channel in channels:
            self.core.elapse(ROUTING_S)
            readings.append(self.read(channel))
        return ",".join(readings)

    def _ranges_of(self, channels: Sequence[int]) -> str:
        return ",".join(f"{self._input(channel).range_V:.6E}" for channel in channels)

    def _apertures_of(self, channels: Sequence[int]) -> str:
        return ",".join(f"{self._input(channel).aperture:g}" for channel in channels)


class SingleMeter(Meter):
    """``meter-single``: one input."""

    def burst_channels(self) -> Sequence[int | None]:
        """That input."""
        return (next(iter(self._probes), None),)

    def table(self) -> list[Entry]:
        """The commands without a channel."""
        only = next(iter(self._probes), None)
        top = self._ranges[-1]
        limit = Limit(self._ranges[0], top, top)
        steps = Limit(APERTURES[0], APERTURES[-1], DEFAULT_APERTURE)
        sense = "[:SENSe]:VOLTage[:DC]"

        def range_of(value: float | None) -> str:
            return f"{self._input(only).range_V if value is None else value:.6E}"

        def aperture_of(value: float | None) -> str:
            return f"{self._input(only).aperture if value is None else value:g}"

        return [
            Entry(
                "CONFigure:VOLTage[:DC]",
                lambda value: self._configure(value, [only]),
                (self._range_number(True),),
            ),
            Entry(
                f"{sense}:RANGe[:UPPer]",
                lambda value: self._set_range(value, [only]),
                (self._range_number(False),),
            ),
            Entry(f"{sense}:RANGe[:UPPer]?", range_of, (limit,)),
            Entry(
                f"{sense}:NPLCycles",
                lambda value: self._set_aperture(value, [only]),
                (self._aperture_number(),),
            ),
            Entry(f"{sense}:NPLCycles?", aperture_of, (steps,)),
            Entry("READ?", lambda: self.read(only)),
            *self._burst.entries("SAMPle"),
        ]
