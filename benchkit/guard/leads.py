"""How the leads are, and what is known of it: moved by hand or relay, proved by measurement."""

from __future__ import annotations

from typing import TYPE_CHECKING

from benchkit.errors import Refused, Tripped
from benchkit.guard.envelope import HARMLESS_REVERSED_A, Envelope
from benchkit.guard.outputs import Outputs
from benchkit.guard.permissives import check_fuse
from benchkit.guard.polarity import check_leads, proof
from benchkit.guard.trips import SUPPLY_TRIPPED
from benchkit.harness import DRAWING, Harness, Port, Source
from benchkit.prediction.coordination import Coordination
from benchkit.protocols import Wiring

if TYPE_CHECKING:
    from benchkit.guard.guard import Guard

SETTLE_S, RUN_DOWN_S = 0.05, 0.3
"""How long a volt settles; and how long where another source was proved just before, whose output
has no more than the resistor across it to run down by."""


class Leads:
    """For the guard alone, which sees to it that nothing is on when anything is moved.

    proved: which way round they are was measured since they were last touched. conducts: at the
    proof a stage with crossed leads carried the current. maybe_crossed: they were to be crossed,
    and not proved right way round since. fuse: what was said of the stage's own.
    """

    def __init__(self, guard: Guard, outputs: Outputs, wiring: Wiring | None) -> None:
        self._guard, self._outputs, self.wiring = guard, outputs, wiring
        self.harness = DRAWING
        self.proved = self.maybe_crossed = self.conducts = False
        self.fuse: Coordination | None = None

    def begin(self) -> None:
        """A run begins: nothing is proved."""
        self.proved = self.conducts = False
        self.fuse = None

    def placed(self, harness: Harness) -> None:
        """A board was put in, connected so."""
        self.harness, self.proved, self.conducts, self.fuse = harness, False, False, None

    def arrange(self, harness: Harness) -> None:
        """Have them connected otherwise; Refused where this bench cannot."""
        wiring = self._movable()
        for source, _ in harness.sources():
            self._outputs.require(source)
        self.proved, self.maybe_crossed = False, self.maybe_crossed or harness.crossed
        self.conducts, self.fuse = False, None
        self._guard.remark("harness", harness.sentence())
        wiring.arrange(harness)
        self.harness = harness

    def refit_fuse(self, name: str) -> None:
        """Have a new fuse put in."""
        wiring = self._movable()
        self.proved = self.conducts = False
        self.fuse = None
        self._guard.remark("new-fuse", f"a new fuse for {name}")
        wiring.refit_fuse(name)

    def _movable(self) -> Wiring:
        if self.wiring is None:
            raise Refused("this bench cannot be wired otherwise")
        return self.wiring

    def permit(self, envelope: Envelope) -> None:
        """What a step needs of the leads; Refused says what is missing."""
        if not self.proved and not envelope.harmless:
            raise Refused(
                f"{envelope.name} cannot begin: which way round the leads are has not been proved"
            )
        wired = {source for source, _ in self.harness.sources()}
        if loose := [source for source in envelope.drives() if source not in wired]:
            raise Refused(f"{envelope.name} cannot begin: {loose[0]} is connected to nothing")
        most = max(envelope.drives().values(), key=lambda drive: drive.current_limit_A)
        if self.harness.crossed and most.current_limit_A > HARMLESS_REVERSED_A:
            # With something at the guarded port the current at the proof need not be the clamp's.
            in_place = self.conducts and not self.harness.guarded
            check_fuse(self.fuse, most, in_place=in_place)

    def prove(self, caution: str | None) -> bool:
        """See ``Guard.prove_polarity``."""
        guard, crossed = self._guard, self.harness.crossed
        self.proved = False
        guard.step("polarity/reversed" if crossed else "polarity")
        blocks, proved = True, True
        for source, port in self.harness.sources():
            turned = crossed and port == "exposed"
            try:
                stands = self._prove(source, port, caution, turned=turned)
                blocks = blocks and stands
            except Tripped as trip:
                if self.maybe_crossed and not crossed:
                    raise Refused(f"{trip}: the leads may still be crossed") from trip
                if not turned or SUPPLY_TRIPPED not in str(trip):
                    raise
                blocks = proved = False
        self.proved, self.conducts = proved, proved and not blocks
        self.maybe_crossed = self.maybe_crossed and not (proved and not crossed)
        guard.remark(
            "polarity",
            "as it should be, proved by measurement" if proved else "not proved: it conducts",
            blocks=blocks,
        )
        return blocks

    def _prove(self, source: Source, port: Port, caution: str | None, *, turned: bool) -> bool:
        """One source; returns whether the stage stands its volt."""
        guard, thresholds = self._guard, self._guard.ceilings.thresholds
        envelope = proof(guard.ceilings.case_max_C, thresholds, source=source, crossed=turned)
        with guard.energised(envelope, caution) as live:
            live.wait(SETTLE_S if len(list(self.harness.sources())) == 1 else RUN_DOWN_S)
            # A stage that conducts makes the supply limit or trip only by now.
            live.look()
            limited = turned and self._outputs.state(source).constant_current
            sign = -1 if turned else 1
            return check_leads(guard._usable, source, port, sign, thresholds, limited=limited)
