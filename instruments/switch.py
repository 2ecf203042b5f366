"""A SCPI switch unit: relays and digital inputs."""

from __future__ import annotations

from instruments.dialects.tables import Flag, SwitchDialect
from instruments.session import Session
from instruments.settings import Setting


class ScpiSwitch:
    """Relays, each with its ``route``, and digital inputs, each with its name.

    Every method raises the errors of ``instruments.errors``. What a relay may be moved for, and
    when, is not known here.
    """

    def __init__(self, session: Session, dialect: SwitchDialect) -> None:
        self.role = session.role
        self.resource = session.resource
        self.dialect = dialect
        self._session = session

    def identify(self) -> str:
        """The ``*IDN?`` answer, asked anew and checked."""
        return self._session.identify()

    def close(self) -> None:
        """Close the session; the relays stay as they are."""
        self._session.close()

    def recover(self) -> None:
        """Bring a session that is out of step back into it; nothing when it is in step."""
        if self._session.out_of_step:
            self._session.resynchronise()

    def set(self, route: str, closed: bool) -> None:
        """Close or open one relay, confirmed by read-back; raises NotConfirmed.

        The read-back is the unit's word: a relay whose contact does not follow its coil is found
        by measuring what it switches.
        """
        relay = self.dialect.relay
        command = self.dialect.select(route) + self._fill(
            relay.close if closed else relay.open, route
        )
        self._session.set_and_confirm(Setting(command, self._fill(relay.query, route), closed))

    def closed(self, route: str) -> bool:
        """Whether a relay reads back as closed."""
        return self._yes_or_no(Flag(query=self.dialect.relay.query), route)

    def query(self, route: str) -> str:
        """The request that reads a relay back."""
        return self._fill(self.dialect.relay.query, route)

    def line(self, name: str) -> bool:
        """The level of a digital input: True for high."""
        return self._yes_or_no(self.dialect.input, name)

    def _yes_or_no(self, flag: Flag, channel: str) -> bool:
        message = self.dialect.select(channel) + self._fill(flag.query, channel)
        answer = self._session.ask(message)
        with self._session.reading(message, (answer,)):
            return flag.raised(answer)

    def _fill(self, request: str, channel: str) -> str:
        return self.dialect.fill(request, channel)
