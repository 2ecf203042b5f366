"""Everything that can energise: the sources and the load, for the guard alone."""

from __future__ import annotations

import contextlib
from collections.abc import Mapping

from benchkit.errors import Refused
from benchkit.guard.envelope import Drive, Envelope
from benchkit.guard.off import doubts_of
from benchkit.harness import NAMES, Source
from benchkit.protocols import Load, Protection, Supply, SupplyState

LEVEL_SHARE, LEVEL_V, LEVEL_A = 0.02, 0.05, 0.01
"""How far a read-back of a protection level may be from what was asked."""

RISING_S = 0.25
"""An output comes up within this (usual for bench supplies; common practice, no source): until then
what it says of its voltage and what a meter reads a little later need not agree."""


class Outputs:
    """The sources by name, and the load."""

    def __init__(self, supplies: Mapping[Source, Supply], load: Load) -> None:
        self._supplies, self.load = dict(supplies), load
        self._on: dict[Source, Drive] = {}
        self._since_s: dict[Source, float] = {}

    @property
    def on(self) -> dict[Source, Drive]:
        """What was switched on and not off since, in the order of switching, and what it holds."""
        return dict(self._on)

    def require(self, source: Source) -> None:
        """Refused where the bench has no such source."""
        if source not in self._supplies:
            raise Refused(
                f"this bench has nothing that stands for {NAMES[source]}: its file declares none"
            )

    def found_on(self) -> str:
        """Which of those that were not switched on say that they are on; empty when none does."""
        told = []
        for source, supply in self._supplies.items():
            if source in self._on:
                continue
            state = supply.state()
            if state.output_on:
                told.append(
                    f"{supply.role} was found switched on, at {state.voltage_V:.3g} V and "
                    f"{state.current_A:.3g} A: switching it off"
                )
        return "; ".join(told)

    def prepare(self, envelope: Envelope) -> None:
        """Program every source of a step, its protection read back; nothing is switched on.

        Refused when a protection level is not what was asked.
        """
        self.load.release()
        for source, drive in envelope.drives().items():
            self.require(source)
            supply = self._supplies[source]
            # Zero volts first: a supply may refuse a protection level below its set voltage, and a
            # voltage above its protection level, so neither may be in the other's way. The current
            # limit before the levels: on supplies whose over-current level is their current limit,
            # the level read back is that of the limit then in force.
            supply.program(0.0, drive.current_limit_A)
            _protect(supply, drive)
            supply.program(drive.voltage_V, drive.current_limit_A)

    def steady(self, now_s: float) -> set[Source]:
        """Those that have been on for as long as an output takes to come up."""
        return {source for source in self._on if now_s - self._since_s[source] >= RISING_S}

    def enable(self, source: Source, drive: Drive, now_s: float) -> None:
        """Switch one on. It counts as on from before it is told."""
        self._on[source], self._since_s[source] = drive, now_s
        self._supplies[source].enable()

    def disable(self, source: Source) -> None:
        """Switch one off, confirmed by read-back, while others stay on: in one exchange, since
        nobody looks at those meanwhile. What does not confirm at once is for ``all_off``."""
        self._supplies[source].disable(patiently=False)
        self._on.pop(source, None)

    def state(self, source: Source) -> SupplyState:
        """What one says of its output."""
        return self._supplies[source].state()

    def all_off(self) -> list[str]:
        """Off first everywhere, then each confirmed by read-back; a sentence for each doubt."""
        self._on = {}
        supplies = list(self._supplies.values())
        if len(supplies) > 1:
            # One that does not answer must not keep the next one on.
            for supply in supplies:
                with contextlib.suppress(Exception):  # whatever one raises, the next goes off
                    supply.send_off()
        doubts = []
        for supply in supplies:
            doubts += doubts_of(f"{supply.role}'s read-back", supply.disable)
        return doubts


def _protect(supply: Supply, drive: Drive) -> None:
    asked = Protection(drive.over_voltage_V, drive.over_current_A)
    read = supply.protect(asked)
    for what, want, got, slack in (
        ("over-voltage", asked.over_voltage_V, read.over_voltage_V, LEVEL_V),
        ("over-current", asked.over_current_A, read.over_current_A, LEVEL_A),
    ):
        if not abs(got - want) <= LEVEL_SHARE * want + slack:
            raise Refused(
                f"{supply.role}: its {what} level reads back as {got:.4g} after "
                f"{want:.4g} was set; nothing is switched on without it"
            )
