"""What the fused trial will do: the full current the wrong way round, which blows the fuse."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from benchkit.errors import InputError
from benchkit.evaluation.clamp_trial_band import drop_band
from benchkit.files import BenchFile
from benchkit.guard import Burst, Ceilings, Envelope
from benchkit.parts.fuse_points import FuseModel
from benchkit.prediction.coordination import Coordination, coordinate
from benchkit.prediction.fuse import fuse_of
from benchkit.prefixes import lasting, spoken
from benchkit.stage import Stage
from instruments.dialects import load_dialect, shipped_dialects
from instruments.dialects.tables import MeterDialect
from procedures.clamp_trial_plan import BEYOND, CROSSED, LEAKING, ClampPlan
from procedures.cooling import COOL_K
from procedures.trial import Forward, Step

FIRST = 4.0
"""A case warms so many times faster at first than its board's time constant says (judgement)."""
LEVEL_SHARE = 1.1
"""The supply's own over-current level, over its current limit."""
LONGER, MARGIN_S = 1.5, 0.25
"""The burst, and with it the step, lasts this many times what the slowest fuse takes, and what
switching on may take: a setting and its read-back on a slow link. No longer, because a clamp whose
fuse does not open stands no more (judgement)."""
ROOM_A = 1.2
"""The range of the burst, over its current."""
FEWEST = 5
"""A pulse with fewer readings in it is not measured."""
CAUTION = (
    "about to drive {current:g} A THE WRONG WAY ROUND through {fuse} and {clamp}: {volts:g} V with "
    "the supply's leads crossed at the exposed port. {fuse} BLOWS, within {clears} if it is what "
    "the stage file says, and one fuse is lost. WEAR EYE PROTECTION: a fuse that does not break "
    "what flows, or a clamp that gives way, can burst; what the supply's output capacitor gives "
    "beyond its current limit is not covered. Nothing may be on the guarded port; keep hands and "
    "face off the board, and a hand on the supply's own switch. Local codes and licensed practice "
    "come first."
)


@dataclass(frozen=True)
class FusedPlan:
    """The trial of one board. clamp: what is read of the clamp again after it."""

    blow: Envelope
    coordination: Coordination
    fuse: str
    kind: str
    """What the new fuse has to be, in words."""
    caution: str
    clamp: ClampPlan

    @property
    def current_A(self) -> float:
        """Of the supply's limit."""
        return self.blow.current_limit_A

    def steps(self) -> Iterator[Step]:
        """For the plan, in order."""
        burst = self.blow.burst
        assert burst is not None
        ports = "outputs confirmed off and both ports dead before a lead is touched; "
        proof = "1 V at 50 mA: the leads are as said, and the meters agree"
        cold = f"nothing on, until the case is within {COOL_K:g} K of where it was at rest"
        yield Step("cool", cold, self.clamp.cool_s)
        yield Step("leads crossed", ports + CROSSED.sentence(), 1.0)
        yield Step("polarity/reversed", f"{proof}; fuse and clamp conduct, so both are in place",
                   0.5)  # fmt: skip
        yield Step(
            "fused trial",
            f"{self.current_A:g} A until {self.fuse} clears, expected within "
            f"{lasting(self.coordination.clears_in_s)}; the meter reads current and guarded "
            f"voltage {burst.seconds:.2g} s long, begun before the output goes on. One fuse is "
            "lost. What the supply's output capacitor gives beyond its current limit is not "
            f"covered. {self.blow.sentence()}",
            burst.seconds,
        )
        yield Step("new fuse", f"everything off; {self.kind} in place of {self.fuse}", 60.0)
        yield Step("polarity/reversed", f"{proof}; the new fuse is in place", 0.5)
        yield self.clamp.drop_step()
        yield Step("supply at the exposed port", ports + LEAKING.sentence(), 1.0)
        yield Step("polarity", proof, 0.5)
        yield self.clamp.leakage_step()
        yield Step("leads put back", ports + self.clamp.home.sentence(), 1.0)
        yield Step("polarity", proof, 0.5)


def plan_fused(
    stage: Stage,
    bench: BenchFile,
    forward: Forward,
    clamp: ClampPlan | None,
    folder: Path | None = None,
) -> FusedPlan | None:
    """The trial that the stage file asks for, if any.

    clamp: the plan of the clamp's own trial. folder: of the bench file, for dialects given by
    their path. InputError, with what would do instead, where fuse and clamp are not coordinated at
    that current, or this bench cannot do it.
    """
    asked = stage.file.fused_trial
    if asked is None:
        return None
    reference = fuse_of(stage)
    if stage.file.stage.topology != "fused-clamp" or reference is None or clamp is None:
        raise InputError(
            "fused_trial is given, but it needs a fused-clamp with a [reverse] table: it blows the "
            "fuse through the clamp, and holds what the clamp does after it against before"
        )
    if clamp.gentle:
        name, item = bench.only("supply")
        raise InputError(
            f'fused_trial is given, but instruments.{name} speaks "{item.dialect}", whose '
            "over-current protection is the current limit itself: it switches off at the limit, "
            "before the fuse opens. Use a supply with an over-current level of its own, "
            "or leave [fused_trial] out"
        )
    model = stage.models[reference]
    assert isinstance(model, FuseModel)
    volts = asked.voltage_V or stage.file.stage.supply_max_V
    coordination = _coordinated(stage, reference, model, volts)
    seconds = LONGER * coordination.clears_in_s + MARGIN_S
    worst_V = drop_band(stage, asked.current_A, stage.file.stage.ambient_nominal_C).most_V
    limit_V = stage.file.limits.clamp_peak_max_V or 0.0
    _check_meters(bench, folder, model, asked.current_A, seconds)
    ceilings = Ceilings.of(bench)
    below_V = BEYOND * max(worst_V, limit_V)
    blow = Envelope(
        "fused trial", volts, asked.current_A, 1.1 * volts + 0.5, LEVEL_SHARE * asked.current_A,
        forward.sweep.case_max_C, volts * asked.current_A, seconds + 60.0, may_limit=True,
        guarded_min_V=-below_V,
        case_rise_max_K_per_s=_rise_max(stage, below_V * asked.current_A, ceilings),
        energy_max_J=volts * asked.current_A * seconds,
        burst=Burst(
            (("exposed_current", ROOM_A * asked.current_A), ("guarded_voltage", below_V)), seconds
        ),
    )  # fmt: skip
    blow.check(ceilings)
    part = model.part
    kind = (
        f"a NEW fuse of {part.rated_current_A:g} A, {model.standard.name}, {part.rated_voltage_V:g}"
        f" V, breaking {part.breaking_A:g} A"
    )
    caution = CAUTION.format(
        current=asked.current_A, volts=volts, fuse=reference, clamp=stage.main,
        clears=lasting(coordination.clears_in_s),
    )  # fmt: skip
    return FusedPlan(blow, coordination, reference, kind, caution, clamp)


def _rise_max(stage: Stage, watts: float, ceilings: Ceilings) -> float:
    """How fast the case may warm, in K/s, while the clamp burns so much until the fuse opens."""
    heat = stage.file.heat
    expected = watts * heat.case_to_ambient_max_K_per_W / heat.time_constant_s
    return max(ceilings.thresholds.case_rise_max_K_per_s, FIRST * expected)


def _coordinated(stage: Stage, name: str, model: FuseModel, volts: float) -> Coordination:
    """InputError with the numbers, and what fuse would do, where it is not."""
    asked, working = stage.file.fused_trial, stage.file.stage
    assert asked is not None
    found = coordinate(
        model,
        clamp_A2s=getattr(stage.main_part, "surge_A2s", None),
        current_A=asked.current_A,
        prospective_A=LEVEL_SHARE * asked.current_A,
        voltage_V=volts,
        working_A=working.current_max_A,
        ambient_C=working.ambient_max_C,
        name=name,
        clamp=stage.main,
    )
    if not found.coordinated:
        raise InputError(
            f"fused_trial.current_A is {asked.current_A:g}, and the fuse does not protect the "
            f"clamp there: {'; '.join(found.notes)}. Nothing is energised that is predicted to "
            "break what is being measured"
        )
    return found


def _check_meters(
    bench: BenchFile, folder: Path | None, model: FuseModel, current_A: float, seconds: float
) -> None:
    """InputError for meters that cannot follow it."""
    names = [bench.points[p].instrument for p in ("exposed_current", "guarded_voltage")]
    fastest = model.fastest
    melts_s = float(fastest.time_to_melt_s(current_A))
    shortest_s = melts_s + float(fastest.arcing_A2s) / current_A**2
    for name in dict.fromkeys(names):
        dialect, spoken_as = _meter_dialect(bench, name, folder), bench.instruments[name].dialect
        if dialect is None:
            continue
        if dialect.burst is None:
            raise InputError(
                f'fused_trial is given, but instruments.{name} speaks "{spoken_as}", which has no '
                "[burst]: it cannot follow a fuse that opens. Use a meter that takes timed "
                "bursts, or leave [fused_trial] out"
            )
        burst = dialect.burst
        interval_s = max(
            burst.interval_s, names.count(name) * burst.route_s, seconds / (burst.most - 1)
        )
        if shortest_s < FEWEST * interval_s:
            raise InputError(
                f"fused_trial.current_A is {current_A:g}: the fastest fuse clears in "
                f"{spoken(shortest_s, 's', 2)}, and instruments.{name} reads every "
                f"{spoken(interval_s, 's', 2)} only; give a lower current, at which it takes "
                f"{spoken(math.ceil(FEWEST * interval_s * 1e3) / 1e3, 's', 2)} or more"
            )


def _meter_dialect(bench: BenchFile, name: str, folder: Path | None) -> MeterDialect | None:
    given = bench.instruments[name].dialect
    if given in shipped_dialects():
        return load_dialect(given, MeterDialect)
    return load_dialect(folder / given, MeterDialect) if folder is not None else None
