"""What a dialect file holds: one model for every table, checked strictly.

A request is the text of one or more SCPI units joined by ';'. Every unit starts at the root
(':' or '*'), so that requests can be joined into one message. Placeholders are in braces; which
ones a request has to hold and may hold is written beside it here.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Annotated, Literal, Self

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, model_validator

from benchkit.errors import InputError

Kind = Literal["identify", "set", "read", "slow"]
Seconds = Annotated[float, Field(gt=0, le=600, allow_inf_nan=False)]
Tolerance = Annotated[float, Field(ge=0, allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
_PLACEHOLDER = re.compile(r"\{([^{}]*)\}")
_CHANNEL = re.compile(r"[0-9A-Za-z_.:]+")


def _request(*needed: str, query: bool) -> AfterValidator:
    def check(text: str) -> str:
        found = _PLACEHOLDER.findall(text)
        for name in needed:
            if name not in found:
                raise ValueError(f"the placeholder {{{name}}} is missing")
        for name in found:
            if name not in {*needed, "channel"}:
                allowed = ", ".join(f"{{{n}}}" for n in (*needed, "channel"))
                raise ValueError(f"{{{name}}} means nothing here; only {allowed} may be used")
        if not text.isascii() or not text.isprintable() or re.search("[{}]", _strip(text)):
            raise ValueError("only printable ASCII is allowed, and braces only as placeholders")
        if any(unit[:1] not in {":", "*"} for unit in text.split(";")):
            raise ValueError("every unit has to start with ':' (the root) or '*'")
        if query and text.count("?") != 1:
            raise ValueError("exactly one query (with a '?') is needed here")
        if not query and "?" in text:
            raise ValueError("a command is needed here, not a query")
        return text

    return AfterValidator(check)


def _strip(text: str) -> str:
    return _PLACEHOLDER.sub("", text)


Command = Annotated[str, _request(query=False)]
Query = Annotated[str, _request(query=True)]
ValueCommand = Annotated[str, _request("value", query=False)]
RangeCommand = Annotated[str, _request("range", query=False)]
NplcCommand = Annotated[str, _request("nplc", query=False)]


class Table(BaseModel):
    """A table of a dialect file: nothing unknown, nothing converted, nothing changed later."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


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


class RangeRequests(Table):
    """Function and range of a meter; ``values`` are the ranges it has, in volts."""

    set: RangeCommand
    query: Query
    tolerance: Tolerance
    values: Annotated[list[Positive], Field(min_length=1)]


class ApertureRequests(Table):
    """Aperture of a meter in power line cycles; ``values`` are those it has."""

    set: NplcCommand
    query: Query
    tolerance: Tolerance
    values: Annotated[list[Positive], Field(min_length=1)]


class MeterReading(Table):
    """One reading; it takes ``apertures`` times the aperture (2 where zero is read as well)."""

    query: Query
    apertures: Annotated[float, Field(ge=1, le=10)]


class PlainReading(Table):
    """One reading."""

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


def requests_of(tables: dict[str, object], path: str = "") -> Iterator[tuple[str, str]]:
    """Every text that starts like a request in nested tables, with its dotted key."""
    for key, entry in tables.items():
        if isinstance(entry, dict):
            yield from requests_of(entry, f"{path}{key}.")
        elif isinstance(entry, str) and entry[:1] in {":", "*"}:
            yield f"{path}{key}", entry
