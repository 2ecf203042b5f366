"""The polarity relay: two routes of a switch unit, of which one at most may be closed."""

from __future__ import annotations

import contextlib

from benchkit.errors import InputError
from benchkit.protocols import Clock
from instruments.errors import ExchangeError, NotConfirmed
from instruments.switch import ScpiSwitch

SETTLE_S = 0.05
"""Bench time for a contact to stop bouncing: milliseconds for a reed relay, some tens for a power
relay (common practice, no source)."""


class PolarityRelay:
    """Connects the supply the right way round (``straight``) or the wrong way (``crossed``).

    Both routes closed at once would short the supply, so it breaks before it makes, and makes
    nothing that it has not seen broken. It looks at no voltage: never hot is the guard's business,
    and so is to measure which way round it is, since a read-back can be wrong.
    """

    def __init__(self, switch: ScpiSwitch, straight: str, crossed: str, clock: Clock) -> None:
        """``straight`` and ``crossed`` are routes; InputError where they are the same one."""
        if straight == crossed:
            raise InputError(
                f"the routes straight and crossed of the polarity relay are both {straight!r}: "
                "they must be two"
            )
        self._switch = switch
        self._routes = {False: straight, True: crossed}
        self._clock = clock

    def set(self, crossed: bool) -> None:
        """Open both, see both open, let the contacts settle, close the one, see both as they
        should be.

        Raises NotConfirmed for a relay that reads back otherwise, and whatever else is in
        ``instruments.errors``. Whatever fails, both are told to open as long as the unit can be
        reached, and none is told to close unless the other was seen open after it had settled.
        """
        self._open_both()
        self._confirm(None)
        self._clock.sleep(SETTLE_S)
        self._confirm(None)
        try:
            self._switch.set(self._routes[crossed], True)
            self._clock.sleep(SETTLE_S)
            self._confirm(crossed)
        except BaseException:
            with contextlib.suppress(ExchangeError):
                self._switch.recover()
                self._open_both()
            raise

    def _open_both(self) -> None:
        """Tell both, even when the first does not do it; the first fault is raised."""
        faults: list[ExchangeError] = []
        for route in self._routes.values():
            try:
                self._switch.set(route, False)
            except ExchangeError as fault:
                faults.append(fault)
                with contextlib.suppress(ExchangeError):
                    self._switch.recover()
        if faults:
            raise faults[0]

    def _confirm(self, made: bool | None) -> None:
        """Read both back; ``made`` is the one that should be closed, None for neither."""
        for crossed, route in self._routes.items():
            closed = self._switch.closed(route)
            if closed != (crossed is made):
                raise NotConfirmed(
                    asked=f"route {route} {_word(not closed)}",
                    read_back=_word(closed),
                    role=self._switch.role,
                    resource=self._switch.resource,
                    command=self._switch.query(route),
                )


def _word(closed: bool) -> str:
    return "closed" if closed else "open"
