"""What one look alone cannot see: how fast, how much in all, and whether anything moves at all."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator

from benchkit.files.guarding import Thresholds
from benchkit.guard.envelope import Envelope
from benchkit.guard.trips import Trip, above
from benchkit.protocols import SupplyState

BACK_S = 1.0
"""A clock that goes back by more would lengthen a step."""
LEAST_S = 1.0
"""A rate is taken over this time at least: over less, a thermometer's noise would trip."""
FROZEN_LOOKS, FROZEN_W = 60, 1.0
"""A sensor that reads the very same through so many looks, while the supply gives more than this,
may be dead; see ``Thresholds.frozen_s``."""


class Watch:
    """Follows one energised step from look to look. blind_s: see ``Guard.blind_s``."""

    def __init__(self, blind_s: float, thresholds: Thresholds) -> None:
        self._blind_s, self._frozen_s = blind_s, thresholds.frozen_s
        self._looked_s = self._compared_s = math.nan
        self._power_W = self._energy_J = 0.0
        self._turn = False
        self._from: tuple[float, float] | None = None
        self._same = math.nan
        self._same_since_s, self._same_looks = math.nan, 0

    def trips(
        self, envelope: Envelope, states: Iterable[SupplyState], case_C: float, now_s: float
    ) -> Iterator[Trip]:
        """What has passed its threshold since the looks before; states: of all that is on."""
        power = sum(abs(state.voltage_V * state.current_A) for state in states)
        since = now_s - self._looked_s
        if since < -BACK_S:
            yield "the clock", f"went back by {-since:.3g} s"
        if since > 0:
            self._energy_J += since * max(power, self._power_W)
            yield from above("time since the last look", since, max(self._blind_s, LEAST_S), "s")
        self._looked_s, self._power_W = now_s, power
        yield from above("energy", self._energy_J, envelope.energy_max_J, "J")
        yield from self._rate(envelope, case_C, now_s)
        yield from self._frozen(case_C, power, now_s)

    def voltage_due(self, now_s: float, poll_s: float) -> str | None:
        """Which voltage is to be looked at, if any: each every two polling intervals, by turns."""
        if now_s - self._compared_s < poll_s * (1 - 1e-6):
            return None
        self._compared_s, self._turn = now_s, not self._turn
        return "guarded_voltage" if self._turn else "exposed_voltage"

    def _rate(self, envelope: Envelope, case_C: float, now_s: float) -> Iterator[Trip]:
        if self._from is None:
            self._from = now_s, case_C
            return
        then_s, then_C = self._from
        if now_s - then_s >= LEAST_S:
            rate = (case_C - then_C) / (now_s - then_s)
            self._from = now_s, case_C
            yield from above("rise of the case", rate, envelope.case_rise_max_K_per_s, "K/s")

    def _frozen(self, case_C: float, power_W: float, now_s: float) -> Iterator[Trip]:
        if case_C != self._same or power_W < FROZEN_W:
            self._same, self._same_since_s, self._same_looks = case_C, now_s, 0
            return
        self._same_looks += 1
        if self._same_looks >= FROZEN_LOOKS:
            yield from above(
                "time the case has not moved", now_s - self._same_since_s, self._frozen_s, "s"
            )
