"""The SCPI session: what may be said to one instrument, and what its answers are worth.

Three rules hold everywhere. Every exchange is one round trip that ends with the error queue, so
that an answer without a doubt costs no more than one with. One lock covers a whole exchange.
And from the moment a message is sent until its complete answer has been read, the session counts
as out of step: whatever interrupts it (a timeout, garbage, Ctrl-C), nothing more is asked until
``resynchronise`` has proved that the next answer belongs to the next question.
"""

from __future__ import annotations

import random
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from instruments.dialects.tables import Kind, Timing
from instruments.errors import (
    BadAnswer,
    ErrorEntry,
    ExchangeError,
    InstrumentError,
    NoAnswer,
    NotConfirmed,
    OutOfStep,
    PeerClosed,
    WrongInstrument,
)
from instruments.link import Link
from instruments.numbers import parse_entry, parse_number, split_fields
from instruments.settings import Setting

Traffic = Callable[[str, str], object]

SENT, RECEIVED = ">", "<"
MOST_ENTRIES = 64
BLIND_WAIT_S = 0.25
_SYNC_ATTEMPTS = 2


class Session:
    """Everything said to one instrument.

    ``expected_identity`` is the beginning of the ``*IDN?`` answer, whole comma-separated fields,
    compared with case ('Maker,Model'). ``traffic`` is called with '>' or '<' and the text of
    every message; it has to be quick. Methods raise the errors of ``instruments.errors``.
    """

    def __init__(
        self,
        link: Link,
        timing: Timing,
        expected_identity: str,
        traffic: Traffic | None = None,
    ) -> None:
        self.role = link.role
        self.resource = link.resource
        self.timing = timing
        self.expected_identity = expected_identity
        self.identity = ""
        self.connections = 0
        self._link = link
        self._traffic = traffic
        self._lock = threading.RLock()
        self._in_step = False
        self._disturbed = False
        self._timeouts = {k: timing.timeout(k) for k in ("identify", "set", "read", "slow")}
        self._suffix = f";{timing.error_query}"
        self._no_error = ';0,"No error"'
        self._gap_s = timing.gap_s
        self._last_s = float("-inf")

    @property
    def out_of_step(self) -> bool:
        """True when nothing may be asked before ``resynchronise`` (or ``open``)."""
        return not self._in_step or self._disturbed

    def open(self) -> str:
        """Connect, check the identity, empty the error queue; returns the ``*IDN?`` answer."""
        with self._lock:
            self._link.open(self.timing.open_s)
            self.connections += 1
            self._disturbed = False
            try:
                self._identify()
                self._drain()
            except BaseException:
                self.close()
                raise
            return self.identity

    def close(self) -> None:
        """Close the connection; never raises."""
        with self._lock:
            self._in_step = False
            self._link.close()

    def identify(self) -> str:
        """Ask ``*IDN?`` again and check the answer; raises WrongInstrument."""
        with self._lock:
            self._require_step("*IDN?")
            self._identify()
            return self.identity

    def set(self, command: str, kind: Kind = "set") -> None:
        """A setting and the error queue in one round trip; raises InstrumentError."""
        self.ask_all(command, 0, kind)

    def set_and_confirm(self, *settings: Setting, kind: Kind = "set") -> tuple[str, ...]:
        """Settings, their read-backs and the error queue in one round trip.

        All commands go before all queries, so that one setting that changes another is seen.
        Returns the raw read-backs; raises InstrumentError, NotConfirmed or BadNumber.
        """
        message = ";".join([s.command for s in settings] + [s.query for s in settings])
        answers = self.ask_all(message, len(settings), kind)
        with self.reading(message, answers):
            for setting, answer in zip(settings, answers, strict=True):
                if not setting.agrees(answer):
                    raise NotConfirmed(
                        asked=setting.expected,
                        read_back=answer,
                        role=self.role,
                        resource=self.resource,
                        command=setting.command,
                    )
        return answers

    def ask(self, query: str, kind: Kind = "read", extra_s: float = 0.0) -> str:
        """One checked answer, as text; ``extra_s`` is added to the timeout of its kind."""
        return self.ask_all(query, 1, kind, extra_s)[0]

    def ask_number(
        self, query: str, kind: Kind = "read", unit: str | None = None, extra_s: float = 0.0
    ) -> float:
        """One checked number (see ``parse_number``); raises Overload and NotANumber too."""
        answers = self.ask_all(query, 1, kind, extra_s)
        try:
            return parse_number(answers[0], unit)
        except ExchangeError as fault:
            self._misread(fault, query, answers)
            raise

    def ask_all(
        self, message: str, answers: int, kind: Kind = "read", extra_s: float = 0.0
    ) -> tuple[str, ...]:
        """Any message that gives ``answers`` answers, checked, in one round trip.

        ``message`` may hold several units joined by ';'. Raises InstrumentError when the error
        queue was not empty, and BadAnswer when the number of answers is another.
        """
        with self._lock:
            self._require_step(message)
            line = self._exchange(message + self._suffix, self._timeouts[kind] + extra_s)
            # The usual answer, recognised without taking it apart.
            if answers == 1 and line.endswith(self._no_error):
                body = line[: -len(self._no_error)]
                if ";" not in body and '"' not in body:
                    self._in_step = True
                    return (body,)
            return self._take_apart(message, line, answers)

    @contextmanager
    def reading(self, command: str, answers: tuple[str, ...]) -> Iterator[None]:
        """Parse answers inside this: parse errors get their circumstances, and a field that is
        no number puts the session out of step."""
        try:
            yield
        except ExchangeError as fault:
            self._misread(fault, command, answers)
            raise

    def blind(self, command: str) -> None:
        """Send and expect nothing: for output-off, which must leave even when out of step.

        A lost connection is opened again first. Waits at most a quarter of a second for an
        exchange of another thread, then sends all the same and leaves that one out of step.
        Raises only when the instrument cannot be reached.
        """
        owned = self._lock.acquire(timeout=BLIND_WAIT_S)
        try:
            if not owned or not self._in_step:
                self._disturbed = True
            try:
                if self._link.gone():
                    self._reopen()
                self._send(command)
            except ExchangeError:
                self._reopen()
                self._send(command)
        finally:
            if owned:
                self._lock.release()

    def resynchronise(self, first: str = "") -> tuple[ErrorEntry, ...]:
        """Prove that the next answer will belong to the next question.

        ``first`` is a command that is sent blind before anything else, as soon as there is a
        connection: what was on its way when the old one was closed may be lost with it.
        Reopens (or clears), then writes numbers to the event enable register of IEEE 488.2 and
        reads lines until the right one comes back, twice with different numbers; late answers
        are discarded on the way. Then checks the identity and empties the error queue, whose
        entries are returned. A silent instrument is given up after open_s + 2 slow_s. Raises
        NoAnswer, PeerClosed, CannotOpen, WrongInstrument; the session stays out of step then.
        """
        with self._lock:
            self._in_step = self._disturbed = False
            if self.timing.recover == "reopen" or not self._link.is_open:
                self._reopen()
            else:
                self._link.clear()
            if first:
                self._send(first)
            started = time.monotonic()
            # Two different numbers: a late answer that happens to equal the first cannot
            # equal the second as well unless two late answers conspire.
            for _ in range(_SYNC_ATTEMPTS):
                if all(self._echoes(nonce) for nonce in random.sample(range(1, 256), 2)):
                    self._send("*ESE 0")
                    self._identify()
                    return self._drain()
            raise NoAnswer(
                "cannot be brought back into step: a number written to the event enable "
                "register did not come back",
                role=self.role,
                resource=self.resource,
                command="*ESE?",
                waited_s=time.monotonic() - started,
            )

    def _echoes(self, nonce: int) -> bool:
        """Write a number to a register, read lines until it comes back; False when it does not."""
        command = f"*ESE {nonce};*ESE?"
        self._send(command)
        deadline = time.monotonic() + self._timeouts["slow"]
        while (left := deadline - time.monotonic()) > 0:
            try:
                line = self._receive(left, command)
            except NoAnswer:
                return False
            except BadAnswer:
                continue
            if line.strip(" +") == str(nonce) and not self._link.waiting():
                return True
        return False

    def _reopen(self) -> None:
        self._in_step = False
        self._link.reopen(self.timing.open_s)
        self.connections += 1

    def _identify(self) -> None:
        line = self._exchange("*IDN?", self._timeouts["identify"])
        given = [field.strip(" ") for field in line.split(",")]
        wanted = [field.strip(" ") for field in self.expected_identity.split(",")]
        if given[: len(wanted)] != wanted:
            raise WrongInstrument(
                expected=self.expected_identity,
                answered=line,
                role=self.role,
                resource=self.resource,
            )
        self.identity = line
        self._in_step = True

    def _drain(self) -> tuple[ErrorEntry, ...]:
        """Read the error queue until it is empty; returns what was in it."""
        query = self.timing.error_query
        found: list[ErrorEntry] = []
        for _ in range(MOST_ENTRIES):
            self._in_step = False
            line = self._exchange(query, self._timeouts["set"])
            with self.reading(query, (line,)):
                entry = parse_entry(line)
            self._in_step = True
            if entry.number == 0:
                return tuple(found)
            found.append(entry)
        self._in_step = False
        raise BadAnswer(
            f"the error queue is still not empty after {MOST_ENTRIES} entries",
            role=self.role,
            resource=self.resource,
            command=query,
            received=line.encode("latin-1"),
        )

    def _take_apart(self, message: str, line: str, answers: int) -> tuple[str, ...]:
        command = message + self._suffix
        with self.reading(command, (line,)):
            fields = split_fields(line)
            entry = parse_entry(fields[-1])
            if entry.number == 0 and len(fields) != answers + 1:
                raise BadAnswer(
                    f"{answers + 1} answers separated by ';' were expected, {len(fields)} came"
                )
        self._in_step = True
        if entry.number != 0:
            entries = [entry]
            try:
                entries += self._drain()
            except ExchangeError:
                # The first entry is what matters; the session is out of step, and says so next.
                self._in_step = False
            raise InstrumentError(entries, role=self.role, resource=self.resource, command=message)
        return tuple(fields[:-1])

    def _exchange(self, message: str, timeout_s: float) -> str:
        self._in_step = False
        if self._link.waiting():
            raise OutOfStep(
                "an answer that was not asked for is waiting",
                role=self.role,
                resource=self.resource,
                command=message,
            )
        self._send(message)
        line = self._receive(timeout_s, message)
        if self._disturbed:
            raise OutOfStep(
                "a command was sent blind while the answer was waited for",
                role=self.role,
                resource=self.resource,
                command=message,
                received=line.encode("latin-1"),
            )
        if self._link.surplus or line.endswith("\r"):
            problem = (
                "more than one line came"
                if self._link.surplus
                else r"the line ends in a carriage return: the terminator should be '\r\n'"
            )
            raise BadAnswer(
                problem,
                role=self.role,
                resource=self.resource,
                command=message,
                received=line.encode("latin-1"),
            )
        return line

    def _send(self, message: str) -> None:
        if self._gap_s:
            pause = self._last_s + self._gap_s - time.monotonic()
            if pause > 0:
                time.sleep(pause)
            self._last_s = time.monotonic()
        if self._traffic is not None:
            self._traffic(SENT, message)
        self._link.write(message)

    def _receive(self, timeout_s: float, command: str) -> str:
        line = self._link.read(timeout_s, command=command)
        if self._traffic is not None:
            self._traffic(RECEIVED, line)
        if self._gap_s:
            self._last_s = time.monotonic()
        return line

    def _require_step(self, command: str) -> None:
        if self._in_step and not self._disturbed:
            return
        if not self._link.is_open:
            raise PeerClosed(
                "the session is not open", role=self.role, resource=self.resource, command=command
            )
        raise OutOfStep(
            "an earlier answer is still missing or was garbled, so nothing was asked",
            role=self.role,
            resource=self.resource,
            command=command,
        )

    def _misread(self, fault: ExchangeError, command: str, answers: tuple[str, ...]) -> None:
        if isinstance(fault, BadAnswer):
            self._in_step = False
        fault.place(
            role=self.role,
            resource=self.resource,
            command=command,
            received=";".join(answers).encode("latin-1"),
        )
