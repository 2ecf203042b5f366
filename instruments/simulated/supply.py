"""The simulated supply: settings, regulation status, protections, output relay.

The three personalities differ only in the way they are spoken to (``supply_tables``).
"""

from __future__ import annotations

import random

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile
from benchkit.harness import Source
from instruments.simulated.core import Core, error_generator, noise_generator
from instruments.simulated.scpi import Device

RATING_OVER_BENCH = 1.2
"""The supply is rated for this much more than the bench's own limits."""
LEVEL_OVER_RATING = 1.1
"""Protection levels can be set up to this much more than the rating."""
GAIN = 0.0005
OFFSET = 0.003
"""Largest errors of setting and read-back: 0.05 % and 3 mV or 3 mA."""
NOISE = 0.0002
"""Standard deviation of read-back noise: 0.2 mV or 0.2 mA."""
TRIP_DELAY_S = 0.02
"""Over-current must last this long before it trips; the ramp of a switch-on does not."""
CONSTANT_CURRENT, CONSTANT_VOLTAGE, OVER_VOLTAGE, OVER_CURRENT = 1, 2, 512, 1024


def line_error(generator: random.Random) -> tuple[float, float]:
    """Draw factor and offset of one setting or read-back."""
    return 1 + generator.uniform(-GAIN, GAIN), generator.uniform(-OFFSET, OFFSET)


class Output:
    """One output: what it was told, whether it is on, and what has tripped it."""

    def __init__(self, rated_voltage_V: float, rated_current_A: float) -> None:
        self.voltage = 0.0
        self.current = 0.0
        self.voltage_level = rated_voltage_V * LEVEL_OVER_RATING
        self.current_level = rated_current_A * LEVEL_OVER_RATING
        self.voltage_guarded = True
        self.current_guarded = True
        self.wanted = False
        self.closed = False
        """Whether the relay really is closed, whatever was wanted."""
        self.over_voltage = False
        self.over_current = False
        self.over_since: float | None = None


class Supply(Device):
    """A DC supply with one output wired to the fixture; other channels lead nowhere.

    Faults: ``stuck-output:NAME``, the relay does not open, and every read-back says so;
    ``lying-output:NAME``, it does not open and every read-back (state, voltage, current, CC) says
    that it did.
    """

    protections_always_on = True
    trips_at_limit = False
    """True: over-current means that the current limit is reached; False: that the level is."""

    def __init__(self, core: Core, name: str, bench: BenchFile) -> None:
        table = bench.instruments[name]
        self.source: Source = table.stands_for or "supply"
        try:
            self.wired = int(table.channel or "1")
        except ValueError:
            raise InputError(
                f"instruments.{name}.channel is {table.channel!r}: the simulated supply numbers "
                'its channels, so it must be a number such as "1"'
            ) from None
        self.channels = range(1, max(3, self.wired) + 1)
        self.rated_voltage_V = bench.bench.voltage_max_V * RATING_OVER_BENCH
        self.rated_current_A = bench.bench.current_max_A * RATING_OVER_BENCH
        generator = error_generator(core.seed, name)
        self._set_voltage, self._set_current = line_error(generator), line_error(generator)
        self._read_voltage, self._read_current = line_error(generator), line_error(generator)
        self._stuck, self._lying = f"stuck-output:{name}", f"lying-output:{name}"
        self.outputs: dict[int, Output] = {}
        super().__init__(core, name, table.identity)
        self.reset()
        self.inserted()
        core.watchers.append(self.watch)
        core.insertions.append(self.inserted)

    def reset(self) -> None:
        """*RST: 0 V, 0 A, off, levels at their highest, nothing tripped."""
        old = self.outputs
        self.outputs = {
            n: Output(self.rated_voltage_V, self.rated_current_A) for n in self.channels
        }
        for number, output in self.outputs.items():
            output.voltage_guarded = output.current_guarded = self.protections_always_on
            output.closed = number in old and old[number].closed
            self.apply(output)
        self._last_watch = self.core.world.now()

    def inserted(self) -> None:
        """A board was put into the fixture."""
        self._noise = noise_generator(self.core.seed, self.name, self.core.serial)
        self.apply(self.outputs[self.wired])

    def apply(self, output: Output) -> None:
        """Move the relay as far as it moves, and tell the world what the regulator holds."""
        output.closed = output.wanted or (output.closed and self._relay_stuck())
        if output is self.outputs[self.wired]:
            factor, offset = self._set_voltage
            voltage = max(0.0, output.voltage * factor + offset)
            factor, offset = self._set_current
            current = max(0.0, output.current * factor + offset)
            self.core.world.command_supply(self.source, voltage, current, output.closed)

    def _relay_stuck(self) -> bool:
        active = self.core.world.active
        return active(self._stuck) is not None or active(self._lying) is not None

    def _lies(self, output: Output) -> bool:
        return (
            output.closed and not output.wanted and self.core.world.active(self._lying) is not None
        )

    def says_on(self, output: Output) -> bool:
        """The output state as read back."""
        return output.closed and not self._lies(output)

    def terminals(self, output: Output) -> tuple[float, float, bool]:
        """True voltage, current, and whether the current is limited."""
        if output is self.outputs[self.wired]:
            return self.core.world.supply_terminals(self.source)
        return (output.voltage if output.closed else 0.0), 0.0, False

    def measured(self, output: Output, which: int) -> float:
        """Read-back of voltage (0) or current (1), with its errors."""
        factor, offset = (self._read_voltage, self._read_current)[which]
        true = 0.0 if self._lies(output) else self.terminals(output)[which]
        return true * factor + offset + self._noise.gauss(0.0, NOISE)

    def condition(self, output: Output) -> int:
        """Questionable bits: 0 constant current, 1 constant voltage, 9 and 10 the trips."""
        bits = OVER_VOLTAGE * output.over_voltage + OVER_CURRENT * output.over_current
        if self.says_on(output):
            bits |= CONSTANT_CURRENT if self.terminals(output)[2] else CONSTANT_VOLTAGE
        return bits

    def questionable(self) -> int:
        """The condition register of a supply with one output."""
        return self.condition(self.outputs[self.wired])

    def watch(self) -> None:
        """Let the protections of the wired output look at its terminals, now."""
        now = self.core.world.now()
        previous, self._last_watch = self._last_watch, now
        output = self.outputs[self.wired]
        if not output.closed:
            return
        if not (output.wanted or self._relay_stuck()):  # the fault was taken away
            self.apply(output)
            return
        if not (output.voltage_guarded or output.current_guarded):
            return
        voltage, current, limited = self.core.world.supply_terminals(self.source)
        over = limited if self.trips_at_limit else current > output.current_level
        if not (output.current_guarded and over):
            output.over_since = None
        elif output.over_since is None:
            output.over_since = previous  # the earliest time at which it can have begun
        since = output.over_since
        if output.voltage_guarded and voltage > output.voltage_level:
            output.over_voltage = True
        if since is not None and now - since >= TRIP_DELAY_S:
            output.over_current = True
        if output.wanted and (output.over_voltage or output.over_current):
            output.wanted = False
            output.over_since = None
            self.apply(output)
