"""A SCPI thermometer, with or without a scanner."""

from __future__ import annotations

from instruments.dialects.tables import ThermometerDialect
from instruments.session import Session


class ScpiThermometer:
    """Temperatures in degrees Celsius. A ``route`` is the scanner's channel, or None."""

    def __init__(self, session: Session, dialect: ThermometerDialect) -> None:
        self.role = session.role
        self.dialect = dialect
        self._session = session
        self._messages: dict[str | None, str] = {}

    def identify(self) -> str:
        """The ``*IDN?`` answer, asked anew and checked."""
        return self._session.identify()

    def close(self) -> None:
        """Close the session."""
        self._session.close()

    def recover(self) -> None:
        """Bring a session that is out of step back into it; nothing when it is in step."""
        if self._session.out_of_step:
            self._session.resynchronise()

    def read(self, route: str | None) -> float:
        """One reading in degrees Celsius; raises NotANumber for an open sensor."""
        message = self._messages.get(route)
        if message is None:
            query = self.dialect.fill(self.dialect.reading.query, route)
            message = self._messages[route] = self.dialect.select(route) + query
        return self._session.ask_number(message, "read", "C")
