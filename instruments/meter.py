"""A SCPI voltmeter, with or without a scanner."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchkit.errors import InputError
from instruments.dialects.meter_tables import BurstRequests
from instruments.dialects.tables import MeterDialect
from instruments.errors import BadAnswer, NotANumber, Overload
from instruments.numbers import format_number, parse_number
from instruments.session import Session
from instruments.settings import Setting

# The timeout of a reading has to be long enough on either mains frequency.
SLOWEST_MAINS_HZ = 50.0


@dataclass(frozen=True, slots=True)
class _Burst:
    """One that was armed: its size, and how long it lasts at most, in seconds."""

    scans: int
    routes: int
    lasts_s: float


class ScpiMeter:
    """A DC voltmeter. A ``route`` is the scanner's channel, None for a meter without one.

    Keeps what was last confirmed for each route, so that only changes are sent; a reopened
    connection or a failed setting makes it forget.
    """

    def __init__(self, session: Session, dialect: MeterDialect) -> None:
        self.role = session.role
        self.dialect = dialect
        self.ranges_V = tuple(sorted(dialect.range.values))
        self.apertures_nplc = tuple(sorted(dialect.aperture.values))
        self._session = session
        self._confirmed: dict[str | None, tuple[float, float]] = {}
        self._connection = session.connections
        self._messages: dict[str | None, str] = {}
        self._armed: _Burst | None = None
        self._busy = False

    def identify(self) -> str:
        """The ``*IDN?`` answer, asked anew and checked."""
        return self._session.identify()

    def close(self) -> None:
        """Close the session."""
        self._session.close()

    def forget(self) -> None:
        """Take nothing for confirmed: the next ``configure`` of each route is sent."""
        self._confirmed.clear()

    def recover(self) -> None:
        """Bring a session that is out of step back into it; nothing when it is in step."""
        if self._session.out_of_step:
            self._session.resynchronise()

    def configure(self, route: str | None, range_V: float, nplc: float) -> None:
        """DC volts on a fixed range with an aperture in power line cycles, both confirmed.

        Nothing is sent when it is so already. A burst that was not fetched is ended. Raises
        NotConfirmed, InstrumentError, ...
        """
        self._end_burst()
        if self._connection != self._session.connections:
            self._confirmed.clear()
            self._connection = self._session.connections
        known = self._confirmed.get(route)
        if known == (range_V, nplc):
            return
        requests = self.dialect
        # Configuring the range resets the aperture on most meters, so the aperture always goes
        # with it, and behind it.
        settings = [
            Setting(
                self._fill(requests.aperture.set, route).replace("{nplc}", format_number(nplc)),
                self._fill(requests.aperture.query, route),
                nplc,
                requests.aperture.tolerance,
            )
        ]
        if known is None or known[0] != range_V:
            command = self._fill(requests.range.set, route)
            settings.insert(
                0,
                Setting(
                    command.replace("{range}", format_number(range_V)),
                    self._fill(requests.range.query, route),
                    range_V,
                    requests.range.tolerance,
                ),
            )
        self._confirmed.pop(route, None)
        select = requests.select(route)
        settings[0] = replace(settings[0], command=select + settings[0].command)
        self._session.set_and_confirm(*settings)
        self._confirmed[route] = (range_V, nplc)

    def read(self, route: str | None, timeout_s: float | None = None) -> float:
        """One reading in volts; raises Overload and NotANumber where there is none to give.

        The time allowed is that of the dialect plus what the confirmed aperture takes, unless
        ``timeout_s`` is longer.
        """
        message = self._messages.get(route)
        if message is None:
            query = self._fill(self.dialect.reading.query, route)
            message = self._messages[route] = self.dialect.select(route) + query
        extra_s = self.aperture_time_s(route)
        if timeout_s is not None:
            extra_s = max(extra_s, timeout_s - self.dialect.link.read_s)
        return self._session.ask_number(message, "read", "V", extra_s)

    def aperture_time_s(self, route: str | None) -> float:
        """How long a reading with the confirmed aperture takes at most; 0 when unconfigured."""
        known = self._confirmed.get(route)
        if known is None:
            return 0.0
        return self.dialect.reading.apertures * known[1] / SLOWEST_MAINS_HZ

    @property
    def can_burst(self) -> bool:
        """Whether the dialect has a [burst] table."""
        return self.dialect.burst is not None

    def shortest_interval_s(self, routes: int) -> float:
        """The smallest time from one scan of so many routes to the next, in seconds."""
        burst = self._burst_requests()
        return max(burst.interval_s, routes * burst.route_s)

    def arm_burst(
        self,
        routes: Sequence[str | None],
        ranges_V: Sequence[float],
        scans: int,
        interval_s: float,
    ) -> None:
        """Set ranges, the burst's aperture and the interval, all confirmed, and start the burst.

        It returns at once. The time base begins when the meter executes the last message of this
        call, which is known to a round trip: whoever needs it better has to find an edge in the
        readings. From then on the meter's own clock paces it: the aperture of scan k and the j-th
        route opens k interval_s + j route_s (of the dialect) later, for aperture_nplc of the
        mains, and the reading is the mean over that time. So the routes of a scan are not read at
        one moment, and what is shorter than the aperture is averaged.

        ``ranges_V`` has one range for each route. Raises InputError for what this meter cannot
        do, and as ``configure`` does.
        """
        burst = self._burst_requests()
        self._check_burst(burst, routes, ranges_V, scans, interval_s)
        for route, range_V in zip(routes, ranges_V, strict=True):
            self.configure(route, range_V, burst.aperture_nplc)
        # What was configured is no longer so: the meter waits for the burst's triggers from here.
        self.forget()
        self._armed, self._busy = None, True
        select = self.dialect.select(routes[0])
        listed = ",".join(self._fill("{channel}", route) for route in routes)
        command = burst.prepare.replace("{routes}", listed).replace("{scans}", str(scans))
        command = command.replace("{interval}", format_number(interval_s))
        self._session.set_and_confirm(
            Setting(select + command, burst.query, interval_s, burst.tolerance)
        )
        self._session.set(burst.initiate)
        aperture_s = self.dialect.reading.apertures * burst.aperture_nplc / SLOWEST_MAINS_HZ
        self._armed = _Burst(scans, len(routes), scans * interval_s + aperture_s)

    def fetch_burst(self) -> NDArray[np.float64]:
        """The readings of the armed burst in volts, (scans, routes); waits for its end.

        An overload is inf with the sign of what was too large, not-a-number is nan. May be called
        again when an answer was lost. Afterwards nothing counts as configured.
        """
        burst, armed = self._burst_requests(), self._armed
        if armed is None:
            raise RuntimeError("no burst was armed")
        answer = self._session.ask(burst.fetch, "read", armed.lasts_s)
        with self._session.reading(burst.fetch, (answer,)):
            fields = answer.split(",")
            if len(fields) != armed.scans * armed.routes:
                raise BadAnswer(
                    f"{armed.scans} scans of {armed.routes} routes were expected, "
                    f"{len(fields)} readings came"
                )
            volts = [_reading(field) for field in fields]
        self.forget()
        self._busy = False
        return np.array(volts, dtype=np.float64).reshape(armed.scans, armed.routes)

    def _end_burst(self) -> None:
        if self._busy:
            self._session.set(self._burst_requests().abort)
            self._armed, self._busy = None, False

    def _burst_requests(self) -> BurstRequests:
        if self.dialect.burst is None:
            raise InputError(
                f"{self.role} cannot take a timed burst: its dialect {self.dialect.name} has no "
                "[burst] table"
            )
        return self.dialect.burst

    def _check_burst(
        self,
        burst: BurstRequests,
        routes: Sequence[str | None],
        ranges_V: Sequence[float],
        scans: int,
        interval_s: float,
    ) -> None:
        if not routes or len(set(routes)) < len(routes) or len(ranges_V) != len(routes):
            raise InputError(
                f"a burst of {self.role} needs different routes and a range for each; routes "
                f"{list(routes)} and ranges {list(ranges_V)} were given"
            )
        if len(routes) > 1 and "{routes}" not in burst.prepare:
            raise InputError(f"{self.role} can take a burst of one route only, not {len(routes)}")
        if not 1 <= scans <= burst.most:
            raise InputError(f"{self.role} takes 1 to {burst.most} scans in a burst, not {scans}")
        shortest = self.shortest_interval_s(len(routes))
        if interval_s < shortest * (1 - 1e-9):
            raise InputError(
                f"{self.role} needs at least {shortest:g} s from one scan of {len(routes)} to the "
                f"next, not {interval_s:g} s"
            )

    def _fill(self, request: str, route: str | None) -> str:
        return self.dialect.fill(request, route)


def _reading(field: str) -> float:
    try:
        return parse_number(field, "V")
    except Overload as fault:
        return -math.inf if fault.negative else math.inf
    except NotANumber:
        return math.nan
