"""A SCPI device: executes program messages, keeps the error queue and the status registers.

What happens after an error in a message
    An *execution* error (-2xx) concerns its unit alone; the units behind it are executed
    (IEEE 488.2 clause 11.5.1.1.5, from memory).
    After a *command* error (-1xx) the standard lets a device discard the rest of the message.
    Here the commands behind it are discarded and the queries are still answered: an output is
    never switched on behind a setting that was not understood, and ``:SOUR:VOLTT 12;:SYST:ERR?``
    gets its error in the same reply. Only a string or a block without an end takes the queries
    with it, as nothing behind it can be told from it.

-410 is queued when the peer has gone before its response was sent, -420 when it has gone in the
middle of a message: what a socket has in place of a talker addressed too early.
Not modelled: the MAV bit of *STB?, since a socket's response is sent before anyone can ask.
"""

from __future__ import annotations

import functools
import logging
import threading
from collections.abc import Callable
from dataclasses import dataclass

from instruments.simulated.core import MESSAGE_S, Core
from instruments.simulated.errors import ErrorQueue, ScpiError
from instruments.simulated.message import parse
from instruments.simulated.parameters import Number, bind
from instruments.simulated.tree import Entry, Tree

logger = logging.getLogger(__name__)

OPERATION_COMPLETE, POWER_ON = 1, 128
ERROR_AVAILABLE, QUESTIONABLE, EVENT_SUMMARY, MASTER_SUMMARY = 4, 8, 32, 64
SCPI_VERSION = "1999.0"
BYTE = Number(0, 255)
WORD = Number(0, 65535)


@dataclass(frozen=True, slots=True)
class _Step:
    call: Callable[..., str | None]
    arguments: tuple[object, ...]
    is_query: bool


class Device:
    """Base of the simulated instruments; each gives its own ``table`` and ``reset``."""

    message_s = MESSAGE_S

    def __init__(self, core: Core, name: str, identity: str) -> None:
        self.core = core
        self.name = name
        self.identity = _four_fields(identity)
        self.errors = ErrorQueue()
        self.turn = threading.Lock()
        """Held for a whole message, so that messages to one instrument do not interleave."""
        self._event_status = POWER_ON
        self._event_enable = 0
        self._service_enable = 0
        self._questionable_event = 0
        self._questionable_enable = 0
        self._operation_enable = 0
        self._wrong_identity = f"wrong-identity:{name}"
        self._tree = Tree([*self.table(), *self._common()])
        self._steps = functools.lru_cache(maxsize=1024)(self._compile)

    def table(self) -> list[Entry]:
        """The commands of this instrument."""
        return []

    def reset(self) -> None:
        """What *RST does to this instrument."""

    def questionable(self) -> int:
        """The condition register of STATus:QUEStionable."""
        return 0

    def execute(self, text: str) -> str | None:
        """Execute one message without its terminator; return the response, or None for none."""
        if self.message_s:
            self.core.elapse(self.message_s)
        answers: list[str] = []
        understood = True
        acted = False
        for step in self._steps(text):
            if isinstance(step, ScpiError):
                self.report(step)
                understood = understood and not step.is_command_error
                continue
            if not (understood or step.is_query):
                continue
            acted = acted or not step.is_query
            answer = self._call(step)
            if answer is not None:
                answers.append(answer)
        if acted:
            self.core.watch()
        return ";".join(answers) if answers else None

    def report(self, error: ScpiError) -> None:
        """Queue an error and set its bit of the standard event status register."""
        self.errors.push(error)
        self._event_status |= error.event_bit

    def _call(self, step: _Step) -> str | None:
        try:
            return step.call(*step.arguments)
        except ScpiError as error:
            self.report(error)
        except Exception as error:
            logger.exception("%s: the simulated world failed", self.name)
            self.report(ScpiError(-310, f"{type(error).__name__}: {error}"))
        return None

    def _compile(self, text: str) -> tuple[_Step | ScpiError, ...]:
        steps: list[_Step | ScpiError] = []
        for unit in parse(text):
            if unit.error is not None:
                steps.append(unit.error)
                continue
            try:
                entry, suffixes = self._tree.find(unit.header)
                arguments = (*suffixes, *bind(entry.takes, unit.data))
            except ScpiError as error:
                steps.append(error)
            else:
                steps.append(_Step(entry.handler, arguments, unit.is_query))
        return tuple(steps)

    def _common(self) -> list[Entry]:
        questionable, operation = "STATus:QUEStionable", "STATus:OPERation"
        return [
            Entry("*CLS", self._clear_status),
            Entry("*ESE", self._set_event_enable, (BYTE,)),
            Entry("*ESE?", lambda: str(self._event_enable)),
            Entry("*ESR?", self._read_event_status),
            Entry("*IDN?", self._identify),
            Entry("*OPC", self._operation_complete),
            Entry("*OPC?", lambda: "1"),
            Entry("*RST", self.reset),
            Entry("*SRE", self._set_service_enable, (BYTE,)),
            Entry("*SRE?", lambda: str(self._service_enable)),
            Entry("*STB?", lambda: str(self._status_byte())),
            Entry("*TST?", lambda: "0"),
            Entry("*WAI", lambda: None),
            Entry("SYSTem:ERRor[:NEXT]?", self.errors.pop),
            Entry("SYSTem:ERRor:COUNt?", lambda: str(len(self.errors))),
            Entry("SYSTem:VERSion?", lambda: SCPI_VERSION),
            Entry("STATus:PRESet", self._preset_status),
            Entry(f"{questionable}[:EVENt]?", self._read_questionable),
            Entry(f"{questionable}:CONDition?", lambda: str(self.questionable())),
            Entry(f"{questionable}:ENABle", self._set_questionable_enable, (WORD,)),
            Entry(f"{questionable}:ENABle?", lambda: str(self._questionable_enable)),
            Entry(f"{operation}[:EVENt]?", lambda: "0"),
            Entry(f"{operation}:CONDition?", lambda: "0"),
            Entry(f"{operation}:ENABle", self._set_operation_enable, (WORD,)),
            Entry(f"{operation}:ENABle?", lambda: str(self._operation_enable)),
        ]

    def _identify(self) -> str:
        if self.core.world.active(self._wrong_identity) is not None:
            return "Somebody Else,Other Model,0,0"
        return self.identity

    def _clear_status(self) -> None:
        self.errors.clear()
        self._event_status = 0
        self._questionable_event = 0

    def _read_event_status(self) -> str:
        status, self._event_status = self._event_status, 0
        return str(status)

    def _read_questionable(self) -> str:
        event = self._questionable_event | self.questionable()
        self._questionable_event = 0
        return str(event)

    def _operation_complete(self) -> None:
        self._event_status |= OPERATION_COMPLETE

    def _set_event_enable(self, value: float) -> None:
        self._event_enable = round(value)

    def _set_service_enable(self, value: float) -> None:
        self._service_enable = round(value) & ~MASTER_SUMMARY

    def _set_questionable_enable(self, value: float) -> None:
        self._questionable_enable = round(value)

    def _set_operation_enable(self, value: float) -> None:
        self._operation_enable = round(value)

    def _preset_status(self) -> None:
        self._questionable_enable = self._operation_enable = 0

    def _status_byte(self) -> int:
        status = ERROR_AVAILABLE if len(self.errors) else 0
        self._questionable_event |= self.questionable()
        if self._questionable_event & self._questionable_enable:
            status |= QUESTIONABLE
        if self._event_status & self._event_enable:
            status |= EVENT_SUMMARY
        if status & self._service_enable:
            status |= MASTER_SUMMARY
        return status


def _four_fields(identity: str) -> str:
    """IEEE 488.2 clause 10.14: maker, model, serial number, firmware level."""
    fields = [part.strip() for part in identity.split(",")][:4]
    return ",".join(fields + ["", "SIM", "0", "1.0"][len(fields) :])
