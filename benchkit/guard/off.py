"""What can be said of whether everything is off."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from benchkit.errors import BenchkitError
from benchkit.files.guarding import Thresholds
from benchkit.protocols import Clock
from benchkit.reading import Reading

STEP_S = 0.02
COARSEST = 10.0
"""Of off_A: a current that the range cannot tell from more than this is not taken for none."""


def doubts_of(what: str, confirm: Callable[[], str | None]) -> list[str]:
    """Nothing when ``confirm`` does, else a sentence: whatever it raises confirms nothing."""
    try:
        doubt = confirm()
    except Exception as fault:  # noqa: BLE001  see above
        doubt = say(fault)
    return [] if doubt is None else [f"{what}: {doubt}"]


def discharged(
    read: Callable[[str], Reading], clock: Clock, ports: Sequence[str], thresholds: Thresholds
) -> str | None:
    """Wait for the ports to fall below residual_V and the exposed one to carry nothing; a sentence
    when they do not. A stage that conducts holds a port low: then the current tells."""
    began = clock.now()
    while True:
        reading = _first_alive(read, ports, thresholds)
        if reading is None:
            return None
        if clock.now() - began > thresholds.discharge_s:
            value = f"{reading.value:.3g} {reading.unit}" if reading.usable else reading.status
            return (
                f"{reading.point} is still {value} {thresholds.discharge_s:g} s after switching off"
            )
        clock.sleep(STEP_S)


def _first_alive(
    read: Callable[[str], Reading], ports: Sequence[str], thresholds: Thresholds
) -> Reading | None:
    """The first reading that does not look off. An overload is no small current: what gives no
    usable reading confirms nothing."""
    for port in ports:
        volts = read(port)
        if not volts.usable or abs(volts.value) >= thresholds.residual_V:
            return volts
    amps = read("exposed_current")
    # On a coarse range the reading itself may be no better than this; too coarse tells nothing.
    least = min(max(thresholds.off_A, 3 * amps.u), COARSEST * thresholds.off_A)
    quiet = amps.usable and abs(amps.value) <= least
    return None if quiet else amps


def say(error: BaseException) -> str:
    """An error in words; its type where it has none or is none of ours."""
    if isinstance(error, (BenchkitError, KeyboardInterrupt)) and str(error):
        return str(error)
    return f"{type(error).__name__}: {error}".rstrip(": ")
