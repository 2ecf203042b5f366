"""A SCPI voltmeter, with or without a scanner."""

from __future__ import annotations

from dataclasses import replace

from instruments.dialects.tables import MeterDialect
from instruments.numbers import format_number
from instruments.session import Session
from instruments.settings import Setting

# The timeout of a reading has to be long enough on either mains frequency.
SLOWEST_MAINS_HZ = 50.0


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

        Nothing is sent when it is so already. Raises NotConfirmed, InstrumentError, ...
        """
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

    def _fill(self, request: str, route: str | None) -> str:
        return self.dialect.fill(request, route)
