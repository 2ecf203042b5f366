"""SCPI error numbers, their texts, and the error queue of an instrument.

Numbers and texts are those of SCPI-1999 volume 2 chapter 21 (from memory).
"""

from __future__ import annotations

from collections import deque

TEXTS = {
    0: "No error",
    -101: "Invalid character",
    -102: "Syntax error",
    -103: "Invalid separator",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -111: "Header separator error",
    -112: "Program mnemonic too long",
    -113: "Undefined header",
    -114: "Header suffix out of range",
    -121: "Invalid character in number",
    -131: "Invalid suffix",
    -138: "Suffix not allowed",
    -151: "Invalid string data",
    -161: "Invalid block data",
    -171: "Invalid expression",
    -200: "Execution error",
    -221: "Settings conflict",
    -222: "Data out of range",
    -224: "Illegal parameter value",
    -310: "System error",
    -350: "Queue overflow",
    -363: "Input buffer overrun",
    -410: "Query INTERRUPTED",
    -420: "Query UNTERMINATED",
}

COMMAND_BIT, EXECUTION_BIT, DEVICE_BIT, QUERY_BIT = 32, 16, 8, 4
"""Bits of the standard event status register (IEEE 488.2 clause 11.5.1, from memory)."""

LONGEST = 255
"""Most characters of an error's description with its device-dependent part (SCPI-1999)."""


class ScpiError(Exception):
    """One error of an instrument; ``detail`` is the device-dependent text after ';'."""

    def __init__(self, number: int, detail: str = "") -> None:
        super().__init__(number, detail)
        self.number = number
        self.detail = detail

    @property
    def is_command_error(self) -> bool:
        """True for the class -100 to -199: the unit could not be understood."""
        return -200 < self.number <= -100

    @property
    def event_bit(self) -> int:
        """The bit of the standard event status register that this error sets."""
        if self.number > -200:
            return COMMAND_BIT
        if self.number > -300:
            return EXECUTION_BIT
        return DEVICE_BIT if self.number > -400 else QUERY_BIT

    def __str__(self) -> str:
        text = TEXTS[self.number]
        if self.detail:
            text += ";" + " ".join(self.detail.split())
        if len(text) > LONGEST:
            text = text[: LONGEST - 3] + "..."
        return f'{self.number},"' + text.replace('"', '""') + '"'


NO_ERROR = '0,"No error"'


class ErrorQueue:
    """First in, first out; when it is full the newest entry becomes -350 (SCPI-1999, 21.8.1)."""

    def __init__(self, size: int = 20) -> None:
        self._size = size
        self._entries: deque[ScpiError] = deque()

    def __len__(self) -> int:
        return len(self._entries)

    def push(self, error: ScpiError) -> None:
        """Append an error, or note that there was no room for it."""
        if len(self._entries) < self._size:
            self._entries.append(error)
        else:
            self._entries[-1] = ScpiError(-350)

    def pop(self) -> str:
        """Return and remove the oldest error as a response, ``0,"No error"`` when empty."""
        return str(self._entries.popleft()) if self._entries else NO_ERROR

    def clear(self) -> None:
        """Forget every error."""
        self._entries.clear()
