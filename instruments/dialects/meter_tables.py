"""The tables of a meter's dialect: range, aperture, one reading, a timed burst."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from instruments.dialects.entries import (
    BurstCommand,
    NplcCommand,
    Positive,
    Query,
    RangeCommand,
    Seconds,
    Table,
    Tolerance,
    WholeCommand,
    WholeQuery,
)


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


class BurstRequests(Table):
    """A timed burst: the meter takes many scans of the listed routes by itself, at a fixed pace.

    ``prepare`` says routes, scans and interval; ``query`` reads the interval back in seconds,
    which may differ by ``tolerance``; ``initiate`` starts and returns at once; ``fetch`` waits for
    the last reading and answers with all, scan by scan, separated by commas; ``abort`` ends one
    that is under way. ``interval_s`` is the smallest time from one scan to the next, ``route_s``
    that from one route of a scan to the next, both at ``aperture_nplc``; ``most`` is how many
    scans there may be.
    """

    prepare: BurstCommand
    query: WholeQuery
    tolerance: Tolerance
    initiate: WholeCommand
    fetch: WholeQuery
    abort: WholeCommand
    interval_s: Seconds
    route_s: Annotated[float, Field(ge=0, le=600, allow_inf_nan=False)]
    aperture_nplc: Positive
    most: Annotated[int, Field(ge=1)]
