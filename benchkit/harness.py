"""Which instrument is at which port of the stage, and which way round."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

At = Literal["supply", "load", "nothing"]

NAMES = {"supply": "the supply", "load": "the load", "nothing": "nothing"}


@dataclass(frozen=True)
class Harness:
    """exposed, guarded: what is connected there. crossed: its plus is on the exposed minus.

    bleeder_ohm: a resistor across the guarded port, which shows a leak that an open port hides.
    """

    exposed: At
    guarded: At
    crossed: bool = False
    bleeder_ohm: float | None = None

    @property
    def sign(self) -> int:
        """Of the exposed voltage, when what is connected there is on."""
        return -1 if self.crossed else 1

    def sentence(self) -> str:
        """Which lead goes where, for a person at the bench."""
        plus, minus = ("minus", "plus") if self.crossed else ("plus", "minus")
        parts = []
        if self.exposed == "nothing":
            parts.append("leave the exposed port open")
        else:
            cross = " (CROSSED, on purpose)" if self.crossed else ""
            parts.append(
                f"connect plus of {NAMES[self.exposed]} to the exposed {plus} terminal and its "
                f"minus to the exposed {minus} terminal{cross}"
            )
        if self.guarded == "nothing":
            parts.append("leave the guarded port open")
        else:
            parts.append(
                f"connect plus of {NAMES[self.guarded]} to the guarded plus terminal and its minus "
                "to the guarded minus terminal"
            )
        if self.bleeder_ohm is not None:
            parts.append(f"put a resistor of {self.bleeder_ohm:g} ohm across the guarded port")
        return "; ".join(parts)


DRAWING = Harness("supply", "load")
"""Right way round: fed at the exposed port, drawn from at the guarded one."""
REVERSED = Harness("supply", "load", crossed=True)


def reversed_harness(bleeder_ohm: float | None) -> Harness:
    """The supply's leads crossed at the exposed port; the load stays, and draws nothing."""
    return Harness("supply", "load", crossed=True, bleeder_ohm=bleeder_ohm)
