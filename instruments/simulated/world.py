"""What the simulated instruments are connected to: the true circuit, its heat, and bench time.

The instruments know nothing of circuits; the plant knows nothing of SCPI. This Protocol is all
that stands between them. Quantities are true ones: an instrument adds its own errors and noise.
"""

from __future__ import annotations

from typing import Protocol

from benchkit.harness import Harness, Source


class World(Protocol):
    """The plant and its clock, as the simulated instruments see them. Callers hold the lock."""

    def now(self) -> float:
        """Bench time in seconds."""

    def elapse(self, seconds: float) -> None:
        """Let bench time pass: at once with a virtual clock, by sleeping in real time."""

    def command_supply(self, source: Source, voltage_V: float, current_A: float, on: bool) -> None:
        """What a source's regulator now tries to hold."""

    def supply_terminals(self, source: Source) -> tuple[float, float, bool]:
        """True voltage and current at a source's terminals, and whether it limits current."""

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
        """Which instrument is at which port of the board, and which way round: as leads and
        relays together have it."""

    def wire(self, harness: Harness) -> None:
        """Connect the instruments otherwise, as a person does with the leads; ValueError with a
        plain sentence when nobody could."""

    def refit(self, reference: str) -> None:
        """Put a new fuse in the place of this one; ValueError for a part that is none."""

    def relay(self, route: str, closed: bool) -> None:
        """Open or close a route of the switch unit; one that [wiring] does not name leads
        nowhere."""

    def line(self, name: str) -> bool:
        """Whether a digital input of the switch unit is high: the interlock loop's is, unless it
        is open; one that [wiring] does not name is low."""

    def insert(self, serial: str, stage_path: str) -> None:
        """Put a board into the fixture, connected as it is used, relays the right way round:
        everything at ambient, board time 0.

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
