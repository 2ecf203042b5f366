"""Switching something off for certain, whatever state the session is in."""

from __future__ import annotations

from instruments.errors import ExchangeError
from instruments.session import Session
from instruments.settings import Setting

_ATTEMPTS = 2


def switch_off(session: Session, off: Setting) -> None:
    """Send ``off`` blind, then bring the session into step and confirm ``off`` by read-back.

    The confirmation sends the command once more, so that one lost with a dying connection is
    made good. A second attempt is made, because old entries of the error queue or a late answer
    may stand in the way of the first. Raises NotConfirmed, or the ExchangeError that prevented
    the confirmation.
    """
    session.blind(off.command)
    for attempt in range(1, _ATTEMPTS + 1):
        try:
            if session.out_of_step:
                session.resynchronise(first=off.command)
            session.set_and_confirm(off)
        except ExchangeError:
            if attempt == _ATTEMPTS:
                raise
        else:
            return
