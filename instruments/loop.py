"""The interlock loop at a digital input of a switch unit."""

from __future__ import annotations

from instruments.switch import ScpiSwitch


class Loop:
    """Fulfils ``benchkit.protocols.Interlock``: the input is high while the loop is closed, so that
    a broken wire reads as open."""

    def __init__(self, switch: ScpiSwitch, line: str) -> None:
        self._switch, self._line = switch, line
        self.role = f"input {line} of {switch.role}"

    def closed(self) -> bool:
        """Whether it is closed now."""
        return self._switch.line(self._line)
