"""The simulated electronic load: constant current, voltage or resistance."""

from __future__ import annotations

from benchkit.files.bench import BenchFile
from instruments.simulated.core import Core, error_generator, noise_generator
from instruments.simulated.parameters import Choice, Limit, Number, Switch
from instruments.simulated.scpi import Device
from instruments.simulated.supply import NOISE, RATING_OVER_BENCH, line_error
from instruments.simulated.tree import Entry

MODES = {"CURR": "CURRent", "VOLT": "VOLTage", "RES": "RESistance"}
UNITS = {"CURR": "A", "VOLT": "V", "RES": "OHM"}
LOWEST_OHM, HIGHEST_OHM = 0.05, 10_000.0


class Load(Device):
    """One input; settings are kept for each mode, the mode in use decides which one holds."""

    def __init__(self, core: Core, name: str, bench: BenchFile) -> None:
        generator = error_generator(core.seed, name)
        self._set = {mode: line_error(generator) for mode in ("CURR", "VOLT")}
        # a resistance has no offset error in volts or amperes: gain alone
        self._set["RES"] = (line_error(generator)[0], 0.0)
        self._read = (line_error(generator), line_error(generator))
        self._limits = {
            "CURR": (0.0, bench.bench.current_max_A * RATING_OVER_BENCH, 0.0),
            "VOLT": (0.0, bench.bench.voltage_max_V * RATING_OVER_BENCH, 0.0),
            "RES": (LOWEST_OHM, HIGHEST_OHM, HIGHEST_OHM),
        }
        super().__init__(core, name, bench.instruments[name].identity)
        self.reset()
        self.inserted()
        core.insertions.append(self.inserted)

    def reset(self) -> None:
        """*RST: constant current, 0 A, input off."""
        self._mode = "CURR"
        self._values = {mode: default for mode, (_, _, default) in self._limits.items()}
        self._on = False
        self._apply()

    def inserted(self) -> None:
        """A board was put into the fixture: the noise starts anew."""
        self._noise = noise_generator(self.core.seed, self.name, self.core.serial)
        self._apply()

    def table(self) -> list[Entry]:
        """The commands."""
        entries = [
            Entry("[:SOURce]:FUNCtion[:MODE]", self._choose, (Choice(tuple(MODES.values())),)),
            Entry("[:SOURce]:FUNCtion[:MODE]?", lambda: self._mode),
            Entry("INPut[:STATe]", self._switch, (Switch(),)),
            Entry("INPut[:STATe]?", lambda: str(int(self._on))),
            Entry("MEASure[:SCALar]:VOLTage[:DC]?", lambda: self._measure(0)),
            Entry("MEASure[:SCALar]:CURRent[:DC]?", lambda: self._measure(1)),
        ]
        for mode, long in MODES.items():
            entries += self._setting(mode, f"[:SOURce]:{long}[:LEVel][:IMMediate][:AMPLitude]")
        return entries

    def _setting(self, mode: str, pattern: str) -> list[Entry]:
        low, high, default = self._limits[mode]

        def put(value: float) -> None:
            self._values[mode] = value
            self._apply()

        def get(limit: float | None) -> str:
            return f"{self._values[mode] if limit is None else limit:.4f}"

        return [
            Entry(pattern, put, (Number(low, high, default, UNITS[mode]),)),
            Entry(pattern + "?", get, (Limit(low, high, default),)),
        ]

    def _choose(self, mode: str) -> None:
        self._mode = mode
        self._apply()

    def _switch(self, on: bool) -> None:
        self._on = on
        self._apply()

    def _apply(self) -> None:
        factor, offset = self._set[self._mode]
        value = max(0.0, self._values[self._mode] * factor + offset)
        self.core.world.command_load(self._mode, value, self._on)

    def _measure(self, which: int) -> str:
        factor, offset = self._read[which]
        true = self.core.world.load_terminals()[which]
        return f"{true * factor + offset + self._noise.gauss(0.0, NOISE):.5f}"
