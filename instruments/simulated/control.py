"""The control port of the simulated bench: bench time, the fixture and its wiring, faults
and true values.

Sentences of the world about what cannot be done come back as -224 with the sentence behind ';'.
"""

from __future__ import annotations

import math
from typing import get_args

from benchkit.errors import InputError
from benchkit.harness import At, Harness
from instruments.simulated.core import Core
from instruments.simulated.errors import ScpiError
from instruments.simulated.parameters import Number, Switch, Text
from instruments.simulated.scpi import Device
from instruments.simulated.tree import Entry

LONGEST_ADVANCE_S = 1e7
CONTROL = "control"
NOT_A_NUMBER = "9.91E37"
"""SCPI-1999 volume 1, 7.2.1.5 (from memory)."""
OHMS = Number(0.0, 1e9, unit="OHM", optional=True)
"""Of a bleeder; 0 is none."""


class Control(Device):
    """Speaks for the bench itself; asking it takes no bench time."""

    message_s = 0.0

    def __init__(self, core: Core) -> None:
        super().__init__(core, CONTROL, "Simulated bench,control,0,1.0")

    def table(self) -> list[Entry]:
        """The commands."""
        return [
            Entry("SIMulation:TIME?", lambda: f"{self.core.world.now():.6f}"),
            Entry(
                "SIMulation:TIME:ADVance",
                self.core.elapse,
                (Number(0.0, LONGEST_ADVANCE_S, unit="S"),),
            ),
            Entry("SIMulation:WIRE", self._wire, (Text(), Text(), Switch(), OHMS)),
            Entry("SIMulation:WIRE?", self._wired),
            Entry("SIMulation:FUSE", self._refit, (Text(),)),
            Entry("SIMulation:INSert", self._insert, (Text(), Text())),
            Entry(
                "SIMulation:FAULt",
                self._fault,
                (Text(), Number(-1e12, 1e12, unit="S"), Number(-1e12, 1e12, optional=True)),
            ),
            Entry("SIMulation:FAULt:CLEar", self._clear_faults),
            Entry("SIMulation:TRUTh?", self._truth, (Text(),)),
        ]

    def _insert(self, serial: str, stage_path: str) -> None:
        try:
            self.core.insert(serial, stage_path)
        except (ValueError, InputError) as error:
            raise ScpiError(-224, str(error)) from None

    def _wire(self, exposed: str, guarded: str, crossed: bool, bleeder_ohm: float | None) -> None:
        try:
            ports = _at("exposed", exposed), _at("guarded", guarded)
            self.core.world.wire(Harness(*ports, crossed, bleeder_ohm or None))
        except ValueError as error:
            raise ScpiError(-224, str(error)) from None
        self.core.watch()

    def _refit(self, reference: str) -> None:
        try:
            self.core.world.refit(reference)
        except ValueError as error:
            raise ScpiError(-224, str(error)) from None
        self.core.watch()

    def _wired(self) -> str:
        harness = self.core.world.harness
        ports = ",".join(f'"{"+".join(at)}"' for at in (harness.exposed, harness.guarded))
        return f"{ports},{int(harness.crossed)},{harness.bleeder_ohm or 0:g}"

    def _fault(self, name: str, at_s: float, value: float | None) -> None:
        try:
            self.core.world.fault(name, at_s, 1.0 if value is None else value)
        except (ValueError, InputError) as error:
            raise ScpiError(-224, str(error)) from None
        self.core.rearm(name)

    def _clear_faults(self) -> None:
        self.core.world.clear_faults()
        self.core.rearm()

    def _truth(self, name: str) -> str:
        try:
            value = self.core.world.truth(name)
        except KeyError:
            raise ScpiError(-224, f"there is no true value named {name!r}") from None
        return NOT_A_NUMBER if math.isnan(value) else f"{value:.12E}"


def _at(port: str, joined: str) -> tuple[At, ...]:
    """Who somebody wants at a port; ValueError for anything that is no instrument to connect."""
    known: dict[str, At] = {at: at for at in get_args(At)}
    names = [name.strip() for name in joined.split("+")] if joined else []
    for name in names:
        if name not in known:
            raise ValueError(
                f"{name!r} cannot be at the {port} port: it must be {', '.join(known)}, several "
                "joined by '+', or empty for an open port"
            )
    return tuple(known[name] for name in names)
