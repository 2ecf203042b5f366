"""What the simulated instruments are connected to: the true circuit, its heat, and bench time.

The instruments know nothing of circuits; the plant knows nothing of SCPI. This Protocol is all
that stands between them. Quantities are true ones: an instrument adds its own errors and noise.
"""

from __future__ import annotations

from typing import Protocol

from benchkit.harness import Harness


class World(Protocol):
    """The plant and its clock, as the simulated instruments see them. Callers hold the lock."""

    def now(self) -> float:
        """Bench time in seconds."""

    def elapse(self, seconds: float) -> None:
        """Let bench time pass: at once with a virtual clock, by sleeping in real time."""

    def command_supply(self, voltage_V: float, current_A: float, on: bool) -> None:
        """What the supply's regulator now tries to hold."""

    def supply_terminals(self) -> tuple[float, float, bool]:
        """True voltage and current at the supply's terminals, and whether it limits current."""

    def command_load(self, mode: str, value: float, on: bool) -> None:
        """What the load now tries to hold: mode "CURR", "VOLT" or "RES"."""

    def load_terminals(self) -> tuple[float, float]:
        """True voltage and current at the load's terminals."""

    def voltage(self, probe: str) -> float:
        """True volts between the two wires of a meter channel; ``probe`` is the bench point that
        the channel reads (for exposed_current: the volts across the shunt)."""

    def temperature(self, probe: str) -> float | None:
        """True degrees Celsius at a sensor ("case" or "ambient"); None when the sensor is open."""

    @property
    def harness(self) -> Harness:
        """Which instrument is at which port of the board, and which way round."""

    def wire(self, harness: Harness) -> None:
        """Connect supply and load otherwise, as a person or a relay does; ValueError with a plain
        sentence when nobody could."""

    def insert(self, serial: str, stage_path: str) -> None:
        """Put a board into the fixture, the right way round: everything at ambient, board time 0.

        Raises ValueError with a plain sentence when the stage file cannot be used."""

    def fault(self, name: str, at_s: float, value: float) -> None:
        """Switch a fault on ``at_s`` seconds of board time from the insertion; ValueError when
        there is no fault of that name."""

    def clear_faults(self) -> None:
        """Take away every fault of bench and link."""

    def active(self, name: str) -> float | None:
        """The value of a fault that is on now (1.0 where it needs none), or None."""

    def truth(self, name: str) -> float:
        """A true value by name, for campaigns that check intervals; KeyError when unknown."""
