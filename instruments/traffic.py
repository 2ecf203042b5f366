"""Where every SCPI message is written."""

from __future__ import annotations

from collections.abc import Callable


class Traffic:
    """Sends every SCPI message to the log of whatever run is going on.

    A log that fails (a full disk) must not keep a message from being sent, since it may be the one
    that switches off: the fault is kept, and raised by ``end``.
    """

    def __init__(self) -> None:
        self._log: Callable[[str, str, str], object] | None = None
        self._fault: Exception | None = None

    def begin(self, log: Callable[[str, str, str], object]) -> None:
        """Write to this log from now on."""
        self._log, self._fault = log, None

    def end(self) -> None:
        """Write nowhere any more; raises what kept the log from being whole."""
        self._log = None
        if self._fault is not None:
            raise self._fault

    def of(self, role: str) -> Callable[[str, str], object]:
        """The callable that one session reports to."""

        def report(direction: str, text: str) -> None:
            if self._log is not None:
                try:
                    self._log(role, direction, text)
                except Exception as fault:  # noqa: BLE001  see above
                    self._log, self._fault = None, fault

        return report
