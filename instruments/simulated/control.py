"""The control port of the simulated bench: bench time, the fixture, faults and true values.

Sentences of the world about what cannot be done come back as -224 with the sentence behind ';'.
"""

from __future__ import annotations

from benchkit.errors import InputError
from instruments.simulated.core import Core
from instruments.simulated.errors import ScpiError
from instruments.simulated.parameters import Number, Text
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
