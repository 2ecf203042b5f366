"""What can be said of whether everything is off."""

from __future__ import annotations

from collections.abc import Callable

from benchkit.errors import BenchkitError


def doubts_of(what: str, confirm: Callable[[], str | None]) -> list[str]:
    """Nothing when ``confirm`` does, else a sentence: whatever it raises confirms nothing."""
    try:
        doubt = confirm()
    except Exception as fault:  # noqa: BLE001  see above
        doubt = say(fault)
    return [] if doubt is None else [f"{what}: {doubt}"]


def say(error: BaseException) -> str:
    """An error in words; its type where it has none or is none of ours."""
    if isinstance(error, (BenchkitError, KeyboardInterrupt)) and str(error):
        return str(error)
    return f"{type(error).__name__}: {error}".rstrip(": ")
