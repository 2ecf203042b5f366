"""Which instrument is at which port of the stage, and which way round."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

Source = Literal["supply", "battery"]
"""What can feed a port. The battery is its stand-in: a second supply with a resistor across it."""
At = Literal["supply", "battery", "load"]
Port = Literal["exposed", "guarded"]

NAMES: dict[At, str] = {
    "supply": "the supply",
    "battery": "the battery's stand-in",
    "load": "the load",
}


@dataclass(frozen=True)
class Harness:
    """exposed, guarded: what is connected there, nothing where empty. crossed: at the exposed port
    the plus of every source is on the minus terminal.

    bleeder_ohm: a resistor across the guarded port, which shows a leak that an open port hides, and
    stands for what equipment that is off has across its terminals.
    """

    exposed: tuple[At, ...]
    guarded: tuple[At, ...]
    crossed: bool = False
    bleeder_ohm: float | None = None

    @property
    def sign(self) -> int:
        """Of the exposed voltage, when a source connected there is on."""
        return -1 if self.crossed else 1

    def sources(self) -> Iterator[tuple[Source, Port]]:
        """Every source that is connected, and the port it is at; the exposed port first."""
        at: tuple[tuple[Port, tuple[At, ...]], ...] = (
            ("exposed", self.exposed),
            ("guarded", self.guarded),
        )
        for port, connected in at:
            for name in connected:
                if name != "load":
                    yield name, port

    def sentence(self) -> str:
        """Which lead goes where, for a person at the bench."""
        parts = [
            *self._at("exposed", self.exposed, crossed=self.crossed),
            *self._at("guarded", self.guarded, crossed=False),
        ]
        if self.bleeder_ohm is not None:
            parts.append(f"put a resistor of {self.bleeder_ohm:g} ohm across the guarded port")
        return "; ".join(parts)

    @staticmethod
    def _at(port: Port, connected: tuple[At, ...], *, crossed: bool) -> Iterator[str]:
        if not connected:
            yield f"leave the {port} port open"
        for name in connected:
            turned = crossed and name != "load"
            plus, minus = ("minus", "plus") if turned else ("plus", "minus")
            cross = " (CROSSED, on purpose)" if turned else ""
            yield (
                f"connect plus of {NAMES[name]} to the {port} {plus} terminal and its minus to "
                f"the {port} {minus} terminal{cross}"
            )


DRAWING = Harness(("supply",), ("load",))
"""Right way round: fed at the exposed port, drawn from at the guarded one."""
CHARGING = Harness(("load",), ("supply",))
"""Right way round for a stage that guards a supply: fed at the guarded port."""
SENSED = Harness(("battery", "load"), ("supply",))
"""The same, with a battery's stand-in that lets a stage switch on which waits for a battery."""
REVERSED = Harness(("supply",), ("load",), crossed=True)


def reversed_from(home: Harness, bleeder_ohm: float | None) -> Harness:
    """The supply's leads crossed at the exposed port. A load at the guarded port stays, and draws
    nothing; where the supply was, that port is left open."""
    guarded = tuple(name for name in home.guarded if name == "load")
    return Harness(("supply",), guarded, crossed=True, bleeder_ohm=bleeder_ohm)
