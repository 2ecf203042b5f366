"""What a dialect file holds: one model for every table, checked strictly.

What a request may look like, and which placeholders it holds, is in ``entries.py``.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Annotated, Literal, Self

from pydantic import Field, ValidationInfo, field_validator, model_validator

from benchkit.errors import InputError
from instruments.dialects.entries import (
    Command,
    Query,
    Seconds,
    Table,
    Tolerance,
    ValueCommand,
    requests_of,
)
from instruments.dialects.meter_tables import (
    ApertureRequests,
    BurstRequests,
    MeterReading,
    RangeRequests,
)
from instruments.numbers import parse_boolean, parse_integer

Kind = Literal["identify", "set", "read", "slow"]
_CHANNEL = re.compile(r"[0-9A-Za-z_.:]+")


class Timing(Table):
    """The ``[link]`` table: how this family wants to be spoken to. Nothing has a default.

    Times in seconds: ``open_s`` for connecting, then one timeout for each kind of operation;
    ``gap_s`` is the smallest time from the end of one exchange to the start of the next.
    ``recover`` is how a lost step is mended: 'reopen' the connection, or VISA's 'clear'.
    """

    terminator: Literal["\n", "\r\n", "\r"]
    open_s: Seconds
    identify_s: Seconds
    set_s: Seconds
    read_s: Seconds
    slow_s: Seconds
    gap_s: Annotated[float, Field(ge=0, le=10, allow_inf_nan=False)]
    recover: Literal["reopen", "clear"]
    error_query: Query

    def timeout(self, kind: Kind) -> float:
        """The time allowed for an operation of this kind, in seconds."""
        return {
            "identify": self.identify_s,
            "set": self.set_s,
            "read": self.read_s,
            "slow": self.slow_s,
        }[kind]


class Channels(Table):
    """The ``[channels]`` table: how a request says which channel it means."""

    style: Literal["none", "list", "select", "prefix"]
    select: Command | None = None

    @model_validator(mode="after")
    def _select_fits(self) -> Self:
        if self.style == "select" and "{channel}" not in (self.select or ""):
            raise ValueError("style 'select' needs 'select', a command that holds {channel}")
        if self.style != "select" and self.select is not None:
            raise ValueError(f"'select' means nothing with style {self.style!r}")
        return self


class Programmed(Table):
    """A value that is set and read back; ``tolerance`` in the unit of the value."""

    set: ValueCommand
    query: Query
    tolerance: Tolerance


class Switched(Table):
    """Something that is on or off."""

    on: Command
    off: Command
    query: Query


class Protecting(Table):
    """A protection: its level, and how it is armed where that is a request of its own.

    Without ``set``, ``query`` and ``tolerance`` the level is the current limit.
    """

    set: ValueCommand | None = None
    query: Query | None = None
    tolerance: Tolerance | None = None
    arm: Command | None = None
    armed: Query | None = None

    @model_validator(mode="after")
    def _complete(self) -> Self:
        level = [self.set, self.query, self.tolerance]
        if any(part is None for part in level) and any(part is not None for part in level):
            raise ValueError("'set', 'query' and 'tolerance' belong together")
        if (self.arm is None) != (self.armed is None):
            raise ValueError("'arm' and 'armed' belong together")
        if self.set is None and self.arm is None:
            raise ValueError("neither a level ('set') nor a way to arm it ('arm') is given")
        return self

    @property
    def level(self) -> Programmed | None:
        """The level as a programmed value; None where the current limit is the level."""
        if self.set is None or self.query is None or self.tolerance is None:
            return None
        return Programmed(set=self.set, query=self.query, tolerance=self.tolerance)


class Flag(Table):
    """A yes-or-no question: answered 0 or 1, or one ``bit`` (0 to 15) of a register."""

    query: Query
    bit: Annotated[int, Field(ge=0, le=15)] | None = None

    def raised(self, answer: str) -> bool:
        """Whether the answer says yes; raises BadNumber for one that says neither."""
        if self.bit is None:
            return parse_boolean(answer)
        return bool(parse_integer(answer) >> self.bit & 1)


class Trips(Table):
    """Whether a protection has tripped, and how trips are cleared."""

    clear: Command
    over_voltage: Flag
    over_current: Flag


class Measured(Table):
    """The instrument's own measurements, in volts and amperes."""

    voltage: Query
    current: Query


class Mode(Table):
    """A mode of operation; ``answer`` is the short form that the query gives back."""

    set: Command
    query: Query
    answer: Annotated[str, Field(pattern=r"^[A-Za-z]+$")]


class PlainReading(Table):
    """One reading."""

    query: Query


class RelayRequests(Table):
    """One relay of a switch unit; ``query`` answers 1 when it is closed and 0 when it is open."""

    close: Command
    open: Command
    query: Query


class Dialect(Table):
    """How one family of instruments spells its requests; ``name`` is the file's."""

    name: str
    kind: str
    about: str
    link: Timing
    channels: Channels

    def requests(self) -> Iterator[tuple[str, str]]:
        """Every request of the dialect with its key ('voltage.set'), in the file's order."""
        yield "link.error_query", self.link.error_query
        yield from requests_of(self.model_dump(exclude={"name", "kind", "about", "link"}))

    def select(self, channel: str | None) -> str:
        """What every message to this channel starts with; raises InputError, see ``fill``."""
        self._check_channel(channel)
        return f"{self.fill(self.channels.select, channel)};" if self.channels.select else ""

    def fill(self, request: str, channel: str | None) -> str:
        """The request for a channel; raises InputError for a channel that does not fit."""
        self._check_channel(channel)
        return request.replace("{channel}", channel or "")

    def _check_channel(self, channel: str | None) -> None:
        if self.channels.style == "none":
            if channel:
                raise InputError(
                    f"dialect {self.name}: channel {channel!r} was given, but this family has none"
                )
        elif channel is None or not _CHANNEL.fullmatch(channel):
            raise InputError(
                f"dialect {self.name}: channel {channel!r} cannot be used; a channel of letters "
                "and digits is needed, such as '1' or '101'"
            )


class SupplyDialect(Dialect):
    """A power supply."""

    kind: Literal["supply"]
    voltage: Programmed
    current: Programmed
    output: Switched
    over_voltage: Protecting
    over_current: Protecting
    trip: Trips
    measure: Measured
    constant_current: Flag


class MeterDialect(Dialect):
    """A voltmeter, with or without a scanner."""

    kind: Literal["meter"]
    range: RangeRequests
    aperture: ApertureRequests
    reading: MeterReading
    burst: BurstRequests | None = None

    @field_validator("burst")
    @classmethod
    def _short_enough(
        cls, burst: BurstRequests | None, info: ValidationInfo
    ) -> BurstRequests | None:
        aperture = info.data.get("aperture")
        if burst and aperture and burst.aperture_nplc not in aperture.values:
            known = ", ".join(f"{value:g}" for value in aperture.values)
            raise ValueError(f"aperture_nplc {burst.aperture_nplc:g} is none of {known}")
        return burst


class ThermometerDialect(Dialect):
    """A thermometer that answers in degrees Celsius."""

    kind: Literal["thermometer"]
    reading: PlainReading


class LoadDialect(Dialect):
    """An electronic load in constant-current mode."""

    kind: Literal["load"]
    function: Mode
    current: Programmed
    input: Switched
    measure: Measured


class SwitchDialect(Dialect):
    """A switch unit: relays, each with its route, and digital inputs, each with its name.

    Both stand where a request says ``{channel}``.
    """

    kind: Literal["switch"]
    relay: RelayRequests
    input: Flag

    @field_validator("channels")
    @classmethod
    def _has_routes(cls, channels: Channels) -> Channels:
        if channels.style == "none":
            raise ValueError("style 'none' cannot name a relay; 'list', 'prefix' or 'select' can")
        return channels
