"""The simulated scanning thermometer."""

from __future__ import annotations

from collections.abc import Sequence

from benchkit.files.bench import BenchFile, TemperatureAccuracy
from instruments.simulated.core import Core, error_generator, noise_generator
from instruments.simulated.meter import FIRST_CHANNEL, LAST_CHANNEL, probes
from instruments.simulated.parameters import Channels
from instruments.simulated.scpi import Device
from instruments.simulated.tree import Entry

NOT_A_NUMBER = "9.91E37"
READING_S = 0.002
NOISE_K = 0.02


class Thermometer(Device):
    """Degrees Celsius by channel list; each sensor has its own gain and offset error, drawn
    within the accuracy that the bench file declares. Without a list the first sensor is read."""

    def __init__(self, core: Core, name: str, bench: BenchFile) -> None:
        table = bench.instruments[name]
        self._probes = probes(bench, name)
        accuracy = table.temperature or TemperatureAccuracy(offset_K=0.5)
        generator = error_generator(core.seed, name)
        self._errors = {
            channel: (
                1 + generator.uniform(-1, 1) * accuracy.reading_percent / 100,
                generator.uniform(-1, 1) * accuracy.offset_K,
            )
            for channel in sorted(self._probes, key=lambda channel: channel or 0)
        }
        super().__init__(core, name, table.identity)
        self.inserted()
        core.insertions.append(self.inserted)

    def inserted(self) -> None:
        """A board was put into the fixture: the noise starts anew."""
        self._noise = noise_generator(self.core.seed, self.name, self.core.serial)

    def table(self) -> list[Entry]:
        """The commands."""
        named = [channel for channel in self._probes if channel is not None]
        channels = Channels(
            frozenset((*range(FIRST_CHANNEL, LAST_CHANNEL + 1), *named)), optional=True
        )
        return [Entry("MEASure[:SCALar]:TEMPerature?", self._measure, (channels,))]

    def _measure(self, channels: Sequence[int] | None) -> str:
        wanted = channels or (next(iter(self._probes), None),)
        return ",".join(self._read(channel) for channel in wanted)

    def _read(self, channel: int | None) -> str:
        self.core.elapse(READING_S)
        probe = self._probes.get(channel)
        true = None if probe is None else self.core.world.temperature(probe)
        if true is None:
            return NOT_A_NUMBER
        factor, offset = self._errors[channel]
        return f"{true * factor + offset + self._noise.gauss(0.0, NOISE_K):.4f}"
