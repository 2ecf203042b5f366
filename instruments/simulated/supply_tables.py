"""How the three personalities of the simulated supply are spoken to: one table each."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Callable, Sequence

from instruments.simulated.errors import ScpiError
from instruments.simulated.parameters import Channels, Limit, Number, Parameter, Switch
from instruments.simulated.supply import LEVEL_OVER_RATING, Output, Supply
from instruments.simulated.tree import Entry

VOLTAGE = "[:SOURce]:VOLTage[:LEVel][:IMMediate][:AMPLitude]"
CURRENT = "[:SOURce]:CURRent[:LEVel][:IMMediate][:AMPLitude]"
VOLTAGE_PROTECTION = "[:SOURce]:VOLTage:PROTection"
CURRENT_PROTECTION = "[:SOURce]:CURRent:PROTection"
CONDITION_BY_CHANNEL = "STATus:QUEStionable:INSTrument:ISUMmary#:CONDition?"


class _Speaking(Supply):
    """What the tables are made of. ``_pick`` turns channel numbers into outputs."""

    channel_parameters: tuple[Parameter, ...] = ()

    @abstractmethod
    def _pick(self, channels: Sequence[int] | None) -> list[Output]:
        """The outputs that channel numbers mean."""

    def _setting(self, pattern: str, name: str, high: float, unit: str, default: float) -> list[
        Entry
    ]:  # fmt: skip
        def put(value: float, channels: Sequence[int] | None = None) -> None:
            for output in self._pick(channels):
                setattr(output, name, value)
                self.apply(output)

        def get(limit: float | None, channels: Sequence[int] | None = None) -> str:
            if limit is not None:
                return f"{limit:.4f}"
            return ",".join(f"{getattr(output, name):.4f}" for output in self._pick(channels))

        return [
            Entry(pattern, put, (Number(0, high, default, unit), *self.channel_parameters)),
            Entry(pattern + "?", get, (Limit(0, high, default), *self.channel_parameters)),
        ]

    def _flag(self, pattern: str, name: str) -> list[Entry]:
        def put(value: bool, channels: Sequence[int] | None = None) -> None:
            for output in self._pick(channels):
                setattr(output, name, value)

        return [
            Entry(pattern, put, (Switch(), *self.channel_parameters)),
            self._query(pattern + "?", lambda output: str(int(getattr(output, name)))),
        ]

    def _query(self, pattern: str, answer: Callable[[Output], str]) -> Entry:
        def get(channels: Sequence[int] | None = None) -> str:
            return ",".join(answer(output) for output in self._pick(channels))

        return Entry(pattern, get, self.channel_parameters)

    def _clear(self, pattern: str, *names: str) -> Entry:
        def clear(channels: Sequence[int] | None = None) -> None:
            for output in self._pick(channels):
                for name in names:
                    setattr(output, name, False)

        return Entry(pattern, clear, self.channel_parameters)

    def _switch(self, on: bool, channels: Sequence[int] | None = None) -> None:
        outputs = self._pick(channels)
        if on and any(output.over_voltage or output.over_current for output in outputs):
            raise ScpiError(-221, "a protection has tripped: clear it first")
        for output in outputs:
            output.wanted = on
            self.apply(output)

    def _condition_of(self, channel: int) -> str:
        if channel not in self.outputs:
            raise ScpiError(-114)
        return str(self.condition(self.outputs[channel]))

    def _shared(self) -> list[Entry]:
        rated_V, rated_A = self.rated_voltage_V, self.rated_current_A
        top_V = rated_V * LEVEL_OVER_RATING
        return [
            *self._setting(VOLTAGE, "voltage", rated_V, "V", 0.0),
            *self._setting(CURRENT, "current", rated_A, "A", 0.0),
            *self._setting(f"{VOLTAGE_PROTECTION}[:LEVel]", "voltage_level", top_V, "V", top_V),
            Entry("OUTPut[:STATe]", self._switch, (Switch(), *self.channel_parameters)),
            self._query("OUTPut[:STATe]?", lambda output: str(int(self.says_on(output)))),
            self._query(
                "MEASure[:SCALar]:VOLTage[:DC]?", lambda output: f"{self.measured(output, 0):.5f}"
            ),
            self._query(
                "MEASure[:SCALar]:CURRent[:DC]?", lambda output: f"{self.measured(output, 1):.5f}"
            ),
        ]

    def _current_level(self) -> list[Entry]:
        top = self.rated_current_A * LEVEL_OVER_RATING
        return self._setting(f"{CURRENT_PROTECTION}[:LEVel]", "current_level", top, "A", top)

    def _trip_queries(self) -> list[Entry]:
        return [
            self._query(f"{VOLTAGE_PROTECTION}:TRIPped?", lambda o: str(int(o.over_voltage))),
            self._query(f"{CURRENT_PROTECTION}:TRIPped?", lambda o: str(int(o.over_current))),
        ]


class PlainSupply(_Speaking):
    """``supply-plain``: one output, no channel anywhere; both protections are always on."""

    def _pick(self, channels: Sequence[int] | None) -> list[Output]:  # noqa: ARG002  it has one
        return [self.outputs[self.wired]]

    def table(self) -> list[Entry]:
        """The commands of one output."""
        return [
            *self._shared(),
            *self._current_level(),
            *self._trip_queries(),
            self._clear(f"{VOLTAGE_PROTECTION}:CLEar", "over_voltage"),
            self._clear(f"{CURRENT_PROTECTION}:CLEar", "over_current"),
        ]


class ListSupply(_Speaking):
    """``supply-list``: every command ends in a channel list; over-current has no level, its
    protection (off after *RST) trips when the current limit has been reached."""

    protections_always_on = False
    trips_at_limit = True

    def _pick(self, channels: Sequence[int] | None) -> list[Output]:
        return [self.outputs[channel] for channel in channels or ()]

    def reset(self) -> None:
        """*RST: over-voltage protection is on, over-current protection off."""
        super().reset()
        for output in self.outputs.values():
            output.voltage_guarded = True

    def table(self) -> list[Entry]:
        """The commands with a channel list."""
        self.channel_parameters = (Channels(self.channels),)
        return [
            *self._shared(),
            *self._flag(f"{CURRENT_PROTECTION}:STATe", "current_guarded"),
            *self._trip_queries(),
            self._clear("OUTPut:PROTection:CLEar", "over_voltage", "over_current"),
            Entry(CONDITION_BY_CHANNEL, self._condition_of),
        ]


class SelectSupply(_Speaking):
    """``supply-select``: commands go to the selected channel; protections are off after *RST."""

    protections_always_on = False

    def _pick(self, channels: Sequence[int] | None) -> list[Output]:  # noqa: ARG002  the selected one
        return [self.outputs[self._selected]]

    def reset(self) -> None:
        """*RST: channel 1 is selected."""
        super().reset()
        self._selected = 1

    def _select(self, channel: float) -> None:
        self._selected = round(channel)

    def table(self) -> list[Entry]:
        """The commands of the selected channel, and those that select."""
        numbers = Number(1, len(self.channels), 1.0)
        return [
            Entry("INSTrument:NSELect", self._select, (numbers,)),
            Entry("INSTrument:NSELect?", lambda: str(self._selected)),
            *self._shared(),
            *self._current_level(),
            *self._flag(f"{VOLTAGE_PROTECTION}:STATe", "voltage_guarded"),
            *self._flag(f"{CURRENT_PROTECTION}:STATe", "current_guarded"),
            self._clear("OUTPut:PROTection:CLEar", "over_voltage", "over_current"),
            Entry(CONDITION_BY_CHANNEL, self._condition_of),
        ]
