"""How far one step may go: what is programmed into the supply, and what trips the run."""

from __future__ import annotations

import math
from dataclasses import dataclass

from benchkit.errors import InputError
from benchkit.files.bench import BenchLimits

GUARDED_MIN_V = -0.6
"""The guarded port may not be driven the wrong way: what equipment stands for sure is no more than
a forward drop (common practice, no source)."""
CASE_RISE_MAX_K_PER_S = 8.0
"""A case that is sound warms over tens of seconds; faster, something burns (judgement)."""


@dataclass(frozen=True)
class Ceilings:
    """What no step may pass on this bench, and how often the guard looks."""

    voltage_max_V: float
    current_max_A: float
    power_max_W: float
    case_max_C: float
    poll_s: float

    @classmethod
    def of(cls, limits: BenchLimits) -> Ceilings:
        """From a bench file."""
        return cls(
            limits.voltage_max_V,
            limits.current_max_A,
            limits.power_max_W,
            limits.case_max_C,
            limits.poll_s,
        )


@dataclass(frozen=True)
class Envelope:
    """One energised step.

    voltage_V and current_limit_A are programmed; over_voltage_V and over_current_A are the
    supply's own protection, programmed and read back before the output goes on. case_max_C,
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
    guarded_min_V: float = GUARDED_MIN_V
    case_rise_max_K_per_s: float = CASE_RISE_MAX_K_PER_S
    energy_max_J: float = math.inf

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
            energy_max_J=voltage_V * limit * longest_s,
        )
        envelope.check(ceilings)
        return envelope

    def check(self, ceilings: Ceilings) -> None:
        """InputError when the step would pass one of the bench's ceilings."""
        name, limit = self.name, max(self.current_limit_A, self.over_current_A)
        _within(
            name,
            "voltage with its over-voltage level",
            max(self.voltage_V, self.over_voltage_V),
            ceilings.voltage_max_V,
            "V",
            "bench.voltage_max_V",
        )
        _within(name, "current limit", limit, ceilings.current_max_A, "A", "bench.current_max_A")
        power = self.voltage_V * limit
        _within(name, "power", power, ceilings.power_max_W, "W", "bench.power_max_W")
        _within(name, "case limit", self.case_max_C, ceilings.case_max_C, "C", "bench.case_max_C")

    def sentence(self) -> str:
        """For plans and cautions."""
        return (
            f"{self.voltage_V:g} V, current limit {self.current_limit_A:.3g} A; the supply trips "
            f"above {self.over_voltage_V:.3g} V or {self.over_current_A:.3g} A, the guard above "
            f"{self.case_max_C:.4g} C at the case or {self.case_rise_max_K_per_s:g} K/s of its "
            f"rise, {self.loss_max_W:.3g} W of loss, {self.guarded_min_V:g} V at the guarded port, "
            f"{self.energy_max_J:.3g} J or {self.longest_s:.0f} s"
        )


def _within(step: str, what: str, value: float, ceiling: float, unit: str, key: str) -> None:
    if not value <= ceiling:
        raise InputError(
            f"{step}: its {what} would be {value:.4g} {unit}, above {key} = {ceiling:g} of the "
            "bench file; lower the stage's values, or use a bench that allows it"
        )
