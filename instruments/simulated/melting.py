"""A fuse in time: it warms as its current makes it, melts, arcs, and is open for good.

The law is that of ``benchkit.parts.fuse``; at a constant current every moment here is a closed
form, so that nothing depends on the length of a step. After melting the current flows on, through
an arc that drops nothing, until the law's ``arcing_A2s`` is spent. Its resistance in the circuit is
that of the law's steady state, not of the warmth it has by now: too high by at most its hot share,
for a time constant. Breaking capacity is left out: it opens whatever flows.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

from benchkit.parts.fuse import FuseLaw

LEAST_ARC_A = 0.1
"""An arc goes out below it (common practice, no source)."""
ROUNDING = 1e-9


@dataclass
class MeltingFuse:
    """One fuse's state; its law holds single numbers.

    warmth: the rise of its element, as a share of the rise at which it melts. onset_A2s and
    onset_s: what has flowed since the current last rose above the opening current.
    """

    law: FuseLaw
    is_open: bool = False
    warmth: float = 0.0
    arc_A2s: float | None = None
    """What is left to flow once it has melted."""
    onset_A2s: float = 0.0
    onset_s: float = 0.0
    cleared_s: float = field(default=math.nan)
    """From the onset until it was open."""

    def until_change_s(self, current_A: float) -> float:
        """How long this current has to flow until the fuse has melted or, melted, is open."""
        amps = abs(current_A)
        if self.is_open:
            return math.inf
        if self.arc_A2s is not None:
            return self.arc_A2s / amps**2 if amps > LEAST_ARC_A else 0.0
        final = (amps / float(self.law.fusing_A)) ** 2
        if final <= 1.0:
            return math.inf
        return float(self.law.melting_s) * math.log1p((1.0 - self.warmth) / (final - 1.0))

    def pass_time(self, seconds: float, current_A: float) -> None:
        """Let a constant current flow for a while, of any length."""
        left = seconds
        while not self.is_open:
            until = self.until_change_s(current_A)
            spent = min(left, until)
            self._flow(spent, abs(current_A))
            if left < until * (1 - ROUNDING):
                return
            left -= spent
            if self.arc_A2s is None:
                self.warmth, self.arc_A2s = 1.0, float(self.law.arcing_A2s)
            else:
                self.is_open, self.arc_A2s, self.cleared_s = True, 0.0, self.onset_s

    def renew(self) -> None:
        """A new one of the same law is put in its place."""
        self.is_open, self.warmth, self.arc_A2s = False, 0.0, None
        self.onset_A2s, self.onset_s, self.cleared_s = 0.0, 0.0, math.nan

    def _flow(self, seconds: float, amps: float) -> None:
        if self.arc_A2s is not None:
            self.arc_A2s = max(0.0, self.arc_A2s - amps**2 * seconds)
        else:
            final = (amps / float(self.law.fusing_A)) ** 2
            kept = math.exp(-seconds / float(self.law.melting_s))
            self.warmth = final + (self.warmth - final) * kept
            if final <= 1.0:
                self.onset_A2s = self.onset_s = 0.0
                return
        self.onset_A2s += amps**2 * seconds
        self.onset_s += seconds
