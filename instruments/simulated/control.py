"""The control port of the simulated bench: bench time, the fixture and its wiring, faults
and true values.

Sentences of the world about what cannot be done come back as -224 with the sentence behind ';'.
"""

from __future__ import annotations

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
            Entry("SIMulation:WIRE", self._wire, (Text(), Text(), Switch())),
            Entry("SIMulation:WIRE?", self._wired),
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

    def _wire(self, exposed: str, guarded: str, crossed: bool) -> None:
        try:
            self.core.world.wire(Harness(_at("exposed", exposed), _at("guarded", guarded), crossed))
        except ValueError as error:
            raise ScpiError(-224, str(error)) from None
        self.core.watch()

    def _wired(self) -> str:
        harness = self.core.world.harness
        return f'"{harness.exposed}","{harness.guarded}",{int(harness.crossed)}'

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
            return f"{self.core.world.truth(name):.12E}"
        except KeyError:
            raise ScpiError(-224, f"there is no true value named {name!r}") from None


def _at(port: str, name: str) -> At:
    """What somebody wants at a port; ValueError for anything that is not on the bench."""
    known: tuple[At, ...] = get_args(At)
    for at in known:
        if at == name:
            return at
    raise ValueError(f"{name!r} cannot be at the {port} port: it must be {', '.join(known)}")
