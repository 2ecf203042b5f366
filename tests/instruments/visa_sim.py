"""Instruments that nobody here wrote: pyvisa-sim (MIT) plays them, on every bus it has.

One file a dialect under ``tests/data/visa_sim`` says what the instrument understands; a test adds
answers of its own, which count before those of the file. To add a dialect, add its file, named
like it, with the same five resources, and name its channel here.
"""

from __future__ import annotations

import json
import tempfile
from collections.abc import Mapping
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

import pyvisa
from pyvisa.constants import ResourceAttribute

from instruments.dialects import (
    Dialect,
    LoadDialect,
    MeterDialect,
    SupplyDialect,
    ThermometerDialect,
    load_dialect,
)
from instruments.link import Link
from instruments.load import ScpiLoad
from instruments.meter import ScpiMeter
from instruments.session import Session
from instruments.supply import ScpiSupply
from instruments.thermometer import ScpiThermometer

FILES = Path(__file__).parent.parent / "data" / "visa_sim"
BUSES = {
    "GPIB": "GPIB0::5::INSTR",
    "serial": "ASRL1::INSTR",
    "socket": "TCPIP0::192.0.2.10::5025::SOCKET",
    "USB": "USB0::0x0001::0x0002::0042::0::INSTR",
    "VXI-11": "TCPIP0::192.0.2.10::inst0::INSTR",
}
SUPPLIES = {"supply-list": "2", "supply-plain": None, "supply-select": "2"}
METERS = {"meter-scan": "101", "meter-single": None}
THERMOMETER, LOAD = "thermometer-scan", "load-plain"
D = TypeVar("D", bound=Dialect)
Answers = Mapping[str, str | None]
"""What an instrument answers to each unit of a message; with None it is taken and nothing done."""


class WholeLines(Link):
    """A link on which the terminator alone ends a line.

    pyvisa-sim sends END behind each answer of a compound message, IEEE 488.2 behind the last
    only. A serial line knows no END, so there the link is used as it is.
    """

    def open(self, timeout_s: float) -> None:
        super().open(timeout_s)
        assert self._visa is not None
        self._visa.set_visa_attribute(ResourceAttribute.suppress_end_enabled, True)


@dataclass
class Shelf:
    """Instruments that a test may open; each open one is a fresh one."""

    place: Path
    stack: ExitStack

    def dialect(self, name: str, kind: type[D], bus: str = "USB") -> D:
        """A shipped dialect as its user would have it; the serial line ends its lines in CR LF."""
        dialect = load_dialect(name, kind)
        link = dialect.link.model_copy(update={"terminator": "\r\n" if bus == "serial" else "\n"})
        return dialect.model_copy(update={"link": link})

    def library(self, name: str, answers: Answers, end: str = "\n") -> str:
        """What pyvisa calls the VISA library, with instruments that give these answers first."""
        text = (FILES / f"{name}.yaml").read_text(encoding="utf-8")
        for query, answer in answers.items():
            pair = {"q": query} if answer is None else {"q": query, "r": f"{answer};"}
            # Behind the dialogues of the device itself: the last that fits is the one that counts.
            text = text.replace(
                "    properties:", f"      - {json.dumps(pair)}\n    properties:", 1
            )
        # A path of its own: pyvisa knows a library by its path, and keeps it with its instruments.
        path = Path(tempfile.mkdtemp(dir=self.place)) / f"{name}.yaml"
        path.write_text(text.replace(r"\n", end.encode("unicode_escape").decode()), "utf-8")
        # They live as long as the manager does, and are found again when a link is reopened.
        manager = pyvisa.ResourceManager(f"{path}@sim")
        self.stack.callback(manager.close)
        return f"{path}@sim"

    def session(
        self,
        dialect: Dialect,
        bus: str = "USB",
        answers: Answers | None = None,
        identity: str = "Orrin Works",
    ) -> Session:
        """An open session with the dialect's own table of times."""
        end = dialect.link.terminator
        library = self.library(dialect.name, answers or {}, end)
        kind = Link if bus == "serial" else WholeLines
        link = kind(dialect.kind, BUSES[bus], terminator=end, backend=library)
        session = Session(link, dialect.link, identity)
        self.stack.callback(session.close)
        session.open()
        return session

    def supply(self, name: str, bus: str = "USB", answers: Answers | None = None) -> ScpiSupply:
        dialect = self.dialect(name, SupplyDialect, bus)
        return ScpiSupply(self.session(dialect, bus, answers), dialect, SUPPLIES[name])

    def meter(self, name: str, bus: str = "USB", answers: Answers | None = None) -> ScpiMeter:
        dialect = self.dialect(name, MeterDialect, bus)
        return ScpiMeter(self.session(dialect, bus, answers), dialect)

    def thermometer(self, bus: str = "USB", answers: Answers | None = None) -> ScpiThermometer:
        dialect = self.dialect(THERMOMETER, ThermometerDialect, bus)
        return ScpiThermometer(self.session(dialect, bus, answers), dialect)

    def load(self, bus: str = "USB", answers: Answers | None = None) -> ScpiLoad:
        dialect = self.dialect(LOAD, LoadDialect, bus)
        return ScpiLoad(self.session(dialect, bus, answers), dialect)
