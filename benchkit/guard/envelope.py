"""How far one step may go: what is programmed into the supplies, and what trips the run."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile
from benchkit.files.guarding import Thresholds
from benchkit.harness import Source

PROOF_V, PROOF_A = 1.0, 0.05
"""Polarity is proved at this voltage and current limit before anything larger: less than a junction
and its leads take, and a current that no part minds (judgement)."""
HARMLESS_REVERSED_A = 1.0
"""With crossed leads no more than this without a fuse that was proved to be in the way: what the
smallest part of a stage stands for as long as the guard may be blind (judgement)."""


@dataclass(frozen=True)
class Ceilings:
    """What no step may pass on this bench, how often the guard looks, and its thresholds."""

    voltage_max_V: float
    current_max_A: float
    power_max_W: float
    case_max_C: float
    poll_s: float
    thresholds: Thresholds = field(default_factory=Thresholds)

    @classmethod
    def of(cls, bench: BenchFile) -> Ceilings:
        """From a bench file."""
        limits = bench.bench
        return cls(
            limits.voltage_max_V,
            limits.current_max_A,
            limits.power_max_W,
            limits.case_max_C,
            limits.poll_s,
            bench.guard,
        )


@dataclass(frozen=True)
class Drive:
    """What one source holds: programmed, and with its own protection read back before it goes on.

    may_limit: it is expected to limit its current.
    """

    voltage_V: float
    current_limit_A: float
    over_voltage_V: float
    over_current_A: float
    may_limit: bool = False

    @property
    def harmless(self) -> bool:
        """No more than a proof of polarity takes."""
        return self.voltage_V <= PROOF_V and self.current_limit_A <= PROOF_A

    def sentence(self) -> str:
        """For plans and cautions."""
        return (
            f"{self.voltage_V:g} V, current limit {self.current_limit_A:.3g} A; it trips "
            f"above {self.over_voltage_V:.3g} V or {self.over_current_A:.3g} A"
        )


@dataclass(frozen=True)
class Burst:
    """Readings of a meter in quick succession, begun just before the output goes on.

    points: (point, largest value expected). seconds: how long it lasts.
    """

    points: tuple[tuple[str, float], ...]
    seconds: float


@dataclass(frozen=True)
class Envelope:
    """One energised step.

    voltage_V and current_limit_A are programmed; over_voltage_V and over_current_A are the
    supply's own protection, programmed and read back before the output goes on. source: which
    supply these are of; beside: what the other one holds, once it is connected. case_max_C,
    case_rise_max_K_per_s, loss_max_W, guarded_min_V, energy_max_J and longest_s trip the run.
    may_limit: the supply is expected to limit its current.
    """

    name: str
    voltage_V: float
    current_limit_A: float
    over_voltage_V: float
    over_current_A: float
    case_max_C: float
    loss_max_W: float
    longest_s: float
    may_limit: bool = False
    guarded_min_V: float = Thresholds().guarded_min_V
    case_rise_max_K_per_s: float = Thresholds().case_rise_max_K_per_s
    energy_max_J: float = math.inf
    source: Source = "supply"
    beside: Drive | None = None
    burst: Burst | None = None

    @classmethod
    def around(
        cls,
        name: str,
        voltage_V: float,
        largest_A: float,
        ceilings: Ceilings,
        *,
        case_max_C: float,
        loss_max_W: float,
        longest_s: float,
        beside: Drive | None = None,
    ) -> Envelope:
        """The envelope of a step that works at ``voltage_V`` and up to ``largest_A``.

        The current limit stands a tenth above the largest current, so that reaching it means
        something is wrong; over-current stands at the limit, over-voltage a tenth above the
        voltage. InputError when that would pass one of the bench's ceilings.
        """
        limit = 1.1 * largest_A + 0.05
        envelope = cls(
            name,
            voltage_V,
            limit,
            1.1 * voltage_V + 0.5,
            limit,
            min(case_max_C, ceilings.case_max_C),
            loss_max_W,
            longest_s,
            guarded_min_V=ceilings.thresholds.guarded_min_V,
            case_rise_max_K_per_s=ceilings.thresholds.case_rise_max_K_per_s,
            energy_max_J=voltage_V * limit * longest_s,
            beside=beside,
        )
        envelope.check(ceilings)
        return envelope

    def drives(self) -> dict[Source, Drive]:
        """What each source holds, the step's own first."""
        own = Drive(
            self.voltage_V, self.current_limit_A, self.over_voltage_V, self.over_current_A,
            self.may_limit,
        )  # fmt: skip
        other: Source = "battery" if self.source == "supply" else "supply"
        return {self.source: own} | ({other: self.beside} if self.beside is not None else {})

    @property
    def harmless(self) -> bool:
        """No more than a proof of polarity takes, whatever is on."""
        return all(drive.harmless for drive in self.drives().values())

    def check(self, ceilings: Ceilings) -> None:
        """InputError when the step would pass one of the bench's ceilings."""
        for source, drive in self.drives().items():
            name = self.name if source == "supply" else f"{self.name}, the battery's stand-in"
            limit = max(drive.current_limit_A, drive.over_current_A)
            if min(drive.voltage_V, drive.current_limit_A) < 0:
                raise InputError(f"{name}: its voltage and current limit must not be negative")
            _within(
                name,
                "voltage with its over-voltage level",
                max(drive.voltage_V, drive.over_voltage_V),
                ceilings.voltage_max_V,
                "V",
                "bench.voltage_max_V",
            )
            _within(name, "current limit", limit, ceilings.current_max_A, "A",
                    "bench.current_max_A")  # fmt: skip
            power = drive.voltage_V * limit
            _within(name, "power", power, ceilings.power_max_W, "W", "bench.power_max_W")
        _within(self.name, "case limit", self.case_max_C, ceilings.case_max_C, "C",
                "bench.case_max_C")  # fmt: skip

    def sentence(self) -> str:
        """For plans and cautions."""
        drives = self.drives()
        beside = [
            f"beside it {'the battery stand-in' if source == 'battery' else 'the supply'} at "
            f"{drive.sentence()}"
            for source, drive in drives.items()
            if source != self.source
        ]
        return (
            f"{'; '.join([drives[self.source].sentence(), *beside])}; the guard trips above "
            f"{self.case_max_C:.4g} C at the case or {self.case_rise_max_K_per_s:g} K/s of its "
            f"rise, {self.loss_max_W:.3g} W of loss, below {self.guarded_min_V:g} V at the guarded "
            f"port, above {self.energy_max_J:.3g} J or {self.longest_s:.0f} s"
        )


def _within(step: str, what: str, value: float, ceiling: float, unit: str, key: str) -> None:
    if not value <= ceiling:
        raise InputError(
            f"{step}: its {what} would be {value:.4g} {unit}, above {key} = {ceiling:g} of the "
            "bench file; lower the stage's values, or use a bench that allows it"
        )
