"""A SCPI power supply output, spoken to in any supply dialect."""

from __future__ import annotations

from dataclasses import replace

from benchkit.protocols import Protection, SupplyState
from instruments.dialects.tables import Flag, Programmed, Protecting, SupplyDialect, Switched
from instruments.errors import NotConfirmed
from instruments.numbers import format_number, parse_boolean, parse_number
from instruments.session import Session
from instruments.settings import Setting
from instruments.switch_off import switch_off


class ScpiSupply:
    """One output of a supply (``benchkit.protocols.Supply``).

    ``channel`` is None for a dialect without channels. Several outputs of one supply share one
    session. Every method raises the errors of ``instruments.errors``.
    """

    def __init__(
        self, session: Session, dialect: SupplyDialect, channel: str | None = None
    ) -> None:
        self.role = session.role
        self.dialect = dialect
        self.channel = channel
        self._session = session
        self._select = dialect.select(channel)
        d = dialect
        # Instruments answer several of these from one register: each query is sent once only.
        self._state_queries = list(
            dict.fromkeys(
                self._fill(query)
                for query in (
                    d.output.query,
                    d.measure.voltage,
                    d.measure.current,
                    d.constant_current.query,
                    d.trip.over_voltage.query,
                    d.trip.over_current.query,
                )
            )
        )
        self._state_message = self._select + ";".join(self._state_queries)

    def identify(self) -> str:
        """The ``*IDN?`` answer, asked anew and checked."""
        return self._session.identify()

    def close(self) -> None:
        """Close the session, which other outputs of the same supply may share."""
        self._session.close()

    def program(self, voltage_V: float, current_A: float) -> None:
        """Set voltage and current limit, both confirmed, in one round trip."""
        self._confirm(
            self._programmed(self.dialect.voltage, voltage_V),
            self._programmed(self.dialect.current, current_A),
        )

    def protect(self, protection: Protection) -> Protection:
        """Program both protections, confirmed, clear old trips, return the levels read back.

        Where a dialect gives over-current no level of its own, the level is the current limit:
        that is what is returned, unchanged, so the caller has to compare, and to ``program``
        first. Raises NotConfirmed when a trip cannot be cleared.
        """
        d = self.dialect
        settings = [
            *self._protecting(d.over_voltage, protection.over_voltage_V),
            *self._protecting(d.over_current, protection.over_current_A),
        ]
        self._confirm(*settings)
        levels = [
            self._fill((p.level or d.current).query) for p in (d.over_voltage, d.over_current)
        ]
        trips = [self._fill(f.query) for f in (d.trip.over_voltage, d.trip.over_current)]
        clear = self._fill(d.trip.clear)
        message = self._select + ";".join([clear, *levels, *trips])
        answers = self._session.ask_all(message, 4, "set")
        with self._session.reading(message, answers):
            found = Protection(parse_number(answers[0], "V"), parse_number(answers[1], "A"))
            tripped = [
                flag.raised(answer)
                for flag, answer in zip(
                    (d.trip.over_voltage, d.trip.over_current), answers[2:], strict=True
                )
            ]
        if any(tripped):
            raise NotConfirmed(
                asked="protection not tripped",
                read_back="still tripped",
                role=self.role,
                resource=self._session.resource,
                command=clear,
            )
        return found

    def enable(self) -> None:
        """Switch the output on, confirmed."""
        self._confirm(self._output(self.dialect.output, on=True))

    def send_off(self) -> None:
        """Send output-off and wait for nothing."""
        self._session.blind(self._select + self._output(self.dialect.output, on=False).command)

    def disable(self, *, patiently: bool = True) -> None:
        """Switch the output off: blind first, then confirmed, even when out of step; or in one
        exchange."""
        off = self._output(self.dialect.output, on=False)
        if not patiently:
            self._confirm(off)
            return
        switch_off(self._session, replace(off, command=self._select + off.command))

    def state(self) -> SupplyState:
        """Everything the supply says of its output, in one round trip."""
        d = self.dialect
        answers = self._session.ask_all(self._state_message, len(self._state_queries))
        by_query = dict(zip(self._state_queries, answers, strict=True))

        def raised(flag: Flag) -> bool:
            return flag.raised(by_query[self._fill(flag.query)])

        with self._session.reading(self._state_message, answers):
            return SupplyState(
                output_on=parse_boolean(by_query[self._fill(d.output.query)]),
                voltage_V=parse_number(by_query[self._fill(d.measure.voltage)], "V"),
                current_A=parse_number(by_query[self._fill(d.measure.current)], "A"),
                constant_current=raised(d.constant_current),
                tripped=raised(d.trip.over_voltage) or raised(d.trip.over_current),
            )

    def measure(self) -> tuple[float, float]:
        """The supply's own reading of volts and amperes, in one round trip."""
        m = self.dialect.measure
        message = self._select + f"{self._fill(m.voltage)};{self._fill(m.current)}"
        answers = self._session.ask_all(message, 2)
        with self._session.reading(message, answers):
            return parse_number(answers[0], "V"), parse_number(answers[1], "A")

    def _fill(self, request: str) -> str:
        return self.dialect.fill(request, self.channel)

    def _confirm(self, *settings: Setting) -> None:
        first, *others = settings
        first = replace(first, command=self._select + first.command)
        self._session.set_and_confirm(first, *others)

    def _programmed(self, requests: Programmed, value: float) -> Setting:
        command = self._fill(requests.set).replace("{value}", format_number(value))
        return Setting(command, self._fill(requests.query), value, requests.tolerance)

    def _protecting(self, requests: Protecting, value: float) -> list[Setting]:
        level = requests.level
        settings = [] if level is None else [self._programmed(level, value)]
        if requests.arm is not None and requests.armed is not None:
            arm, armed = self._fill(requests.arm), self._fill(requests.armed)
            settings.append(Setting(arm, armed, expected=True))
        return settings

    def _output(self, requests: Switched, *, on: bool) -> Setting:
        command = requests.on if on else requests.off
        return Setting(self._fill(command), self._fill(requests.query), expected=on)
