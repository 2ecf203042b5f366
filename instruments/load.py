"""A SCPI electronic load in constant-current mode."""

from __future__ import annotations

from dataclasses import dataclass

from instruments.dialects.tables import LoadDialect
from instruments.numbers import format_number, parse_boolean, parse_number
from instruments.session import Session
from instruments.settings import Setting
from instruments.switch_off import switch_off


@dataclass(frozen=True, slots=True)
class LoadState:
    """What a load says of its own input."""

    input_on: bool
    voltage_V: float
    current_A: float


class ScpiLoad:
    """One input of a load (``benchkit.protocols.Load``); ``channel`` as for a supply."""

    def __init__(self, session: Session, dialect: LoadDialect, channel: str | None = None) -> None:
        self.role = session.role
        self.dialect = dialect
        self.channel = channel
        self._session = session
        self._select = dialect.select(channel)

    def identify(self) -> str:
        """The ``*IDN?`` answer, asked anew and checked."""
        return self._session.identify()

    def close(self) -> None:
        """Close the session."""
        self._session.close()

    def draw(self, current_A: float) -> None:
        """Constant current, its value, and the input on, all confirmed, in one round trip."""
        d = self.dialect
        command = self._fill(d.current.set).replace("{value}", format_number(current_A))
        function = Setting(
            self._select + self._fill(d.function.set),
            self._fill(d.function.query),
            d.function.answer,
        )
        current = Setting(command, self._fill(d.current.query), current_A, d.current.tolerance)
        switch = Setting(self._fill(d.input.on), self._fill(d.input.query), expected=True)
        self._session.set_and_confirm(function, current, switch)

    def release(self) -> None:
        """Switch the input off: blind first, then confirmed, even when out of step."""
        d = self.dialect.input
        command = self._select + self._fill(d.off)
        switch_off(self._session, Setting(command, self._fill(d.query), expected=False))

    def state(self) -> LoadState:
        """Input, volts and amperes in one round trip."""
        d = self.dialect
        queries = (d.input.query, d.measure.voltage, d.measure.current)
        message = self._select + ";".join(self._fill(query) for query in queries)
        answers = self._session.ask_all(message, 3)
        with self._session.reading(message, answers):
            return LoadState(
                input_on=parse_boolean(answers[0]),
                voltage_V=parse_number(answers[1], "V"),
                current_A=parse_number(answers[2], "A"),
            )

    def _fill(self, request: str) -> str:
        return self.dialect.fill(request, self.channel)
