"""What the trial of a clamp will do: its leakage the right way round, its drop the wrong way."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path

from benchkit.errors import InputError
from benchkit.evaluation.clamp_trial_band import CLAMPS, drop_band
from benchkit.files import BenchFile
from benchkit.files.bench import PointName
from benchkit.files.parts import Diode, Fuse
from benchkit.guard import Ceilings, Envelope
from benchkit.guard.envelope import PROOF_A, PROOF_V
from benchkit.harness import Harness
from benchkit.stage import Stage
from procedures.cooling import COOL_K, longest_cool_s
from procedures.limiting import trips_at_limit
from procedures.trial import ZEROS, Forward, Step

LEAKING = Harness(("supply",), ())
CROSSED = Harness(("supply",), (), crossed=True)
"""The supply at the exposed port, either way round, and nothing on the guarded one: a supply that
is off there would carry the current past the clamp, through its output diode."""
SHARES = (0.1, 0.3, 1.0)
"""Of reverse.current_limit_A: the rungs of the clamp's drop."""
DRIVE_V = 3.0
"""More than any junction drops: less than this and no current is an open clamp."""
HEADROOM_V = 1.0
"""What is set above the drop of the worst clamp, where DRIVE_V is not enough."""
LEAKAGE_LIMIT_A = 0.1
GENTLE_A = 0.01
"""The most at which a drop is read by a supply that cannot stay at its current limit: a fifth of
what a proof of polarity allows, so that no step towards it trips."""
FIRST_V, RISE_V = 0.2, 0.03
"""Such a supply's voltage begins here and rises by this while next to nothing flows."""
BEYOND = 1.5
"""A rung trips, and the next one is left out, this far beyond limit or worst clamp (judgement)."""
READINGS = 4
POINTS: tuple[PointName, ...] = (
    "exposed_voltage", "exposed_current", "guarded_voltage", "drop", "case",
)  # fmt: skip
CAUTION = (
    "about to apply {volts:g} V to the exposed port with a current limit of {limit:g} A, the "
    "guarded port open: what flows is the clamp's leakage. Nothing else may be on the ports; keep "
    "hands off the board, and a hand on the supply's own switch. Local codes and licensed practice "
    "come first."
)
CROSSED_CAUTION = (
    "about to drive current THE WRONG WAY ROUND through the clamp: the supply's leads are crossed "
    "at the exposed port, {volts:g} V with a current limit of up to {limit:g} A. Wear eye "
    "protection. Nothing may be on the guarded port; keep hands off the board, and a hand on the "
    "supply's own switch. Local codes and licensed practice come first."
)


@dataclass(frozen=True)
class ClampPlan:
    """The trial of one board. drops: rising in current; the first also finds out whether the clamp
    conducts at all. gentle: that the supply cannot stay at its limit, so that ``drops`` is the one
    envelope within which its voltage rises step by step."""

    leakage: Envelope
    drops: tuple[Envelope, ...]
    gentle: bool
    full_A: float
    """The largest of the currents."""
    leakage_caution: str
    crossed_caution: str
    home: Harness
    cool_s: float
    settle_s: float
    read_s: float

    @property
    def largest_A(self) -> float:
        """What the current's range is chosen for in the drop's rungs."""
        return 2 * self.drops[-1].current_limit_A

    @property
    def currents_A(self) -> tuple[float, ...]:
        """At which the drop is read."""
        return (self.full_A,) if self.gentle else tuple(e.current_limit_A for e in self.drops)

    def steps(self) -> Iterator[Step]:
        """For the plan, in order."""
        ports = "outputs confirmed off and both ports dead before a lead is touched; "
        proof = "1 V at 50 mA: the leads are as said, and the meters agree"
        cold = f"nothing on, until the case is within {COOL_K:g} K of where it was at rest"
        yield Step("cool", cold, self.cool_s)
        yield Step("supply at the exposed port", ports + LEAKING.sentence(), 1.0)
        yield Step("polarity", proof, 0.5)
        yield self.leakage_step()
        yield Step("leads crossed", ports + CROSSED.sentence(), 1.0)
        if not self.gentle:
            yield Step("polarity/reversed", f"{proof}; a clamp conducts all of it", 0.5)
        yield self.drop_step()
        yield Step("leads put back", ports + self.home.sentence(), 1.0)
        yield Step("polarity", proof, 0.5)

    def leakage_step(self) -> Step:
        """For the plan."""
        text = f"{ZEROS} zero readings, then what the clamp leaks: {self.leakage.sentence()}"
        return Step("clamp leakage", text, self.settle_s + self.read_s)

    def drop_step(self) -> Step:
        """For the plan."""
        last, each = self.drops[-1], self.settle_s + self.read_s
        if self.gentle:
            text = (
                f"the clamp's drop at {self.full_A:g} A: this supply trips at its current limit, "
                f"so it cannot serve as a current source; its voltage rises from {FIRST_V:g} V in "
                f"small steps, off between them. All of them: {last.sentence()}"
            )
            return Step("clamp drop", text, (last.voltage_V - FIRST_V) / RISE_V * each)
        amps = ", ".join(f"{a:g}" for a in self.currents_A)
        text = (
            f"the clamp's drop at {amps} A, the supply as a current source, off between them. "
            f"Last: {last.sentence()}"
        )
        return Step("clamp drop", text, len(self.drops) * each)


def plan_clamp(
    stage: Stage, bench: BenchFile, forward: Forward, folder: Path | None = None
) -> ClampPlan | None:
    """The trial of a clamp topology with [reverse]; None for any other stage.

    folder: of the bench file, for dialects given by their path. InputError when it would pass a
    ceiling of the bench or a rating, or asks for what is not done with a clamp.
    """
    reverse = stage.file.reverse
    if reverse is None or stage.file.stage.topology not in CLAMPS:
        return None
    _check(stage)
    ceilings, most_A = Ceilings.of(bench), reverse.current_limit_A
    volts, limit = stage.file.stage.supply_max_V, min(LEAKAGE_LIMIT_A, most_A)
    read_s = READINGS * sum(
        bench.points[p].aperture_nplc / bench.bench.line_frequency_Hz for p in POINTS
    )
    settle_s = bench.bench.settle_s + 2 * bench.bench.poll_s
    longest_s = 60.0 + 5 * (settle_s + read_s)
    sweep = forward.sweep
    leakage = Envelope(
        "clamp leakage", volts, limit, 1.1 * volts + 0.5,
        # Not above the limit: some supplies have no level of their own, and trip at the limit.
        limit, sweep.case_max_C, volts * limit, longest_s,
        guarded_min_V=ceilings.thresholds.guarded_min_V,
        case_rise_max_K_per_s=ceilings.thresholds.case_rise_max_K_per_s,
        energy_max_J=volts * limit * longest_s,
    )  # fmt: skip
    gentle = trips_at_limit(bench, folder)
    worst_V = drop_band(stage, most_A, stage.file.stage.ambient_nominal_C).most_V
    lowest_V = -BEYOND * max(worst_V, stage.file.limits.guarded_reverse_max_V or 0.0)
    drive_V = max(DRIVE_V, worst_V + HEADROOM_V)

    def rung(name: str, drive_V: float, amps: float, level_A: float, low_V: float) -> Envelope:
        return replace(
            leakage, name=name, voltage_V=drive_V, current_limit_A=amps,
            over_voltage_V=1.1 * drive_V + 0.5, over_current_A=level_A, loss_max_W=drive_V * amps,
            may_limit=True, guarded_min_V=low_V, energy_max_J=1.0 + drive_V * amps * longest_s,
        )  # fmt: skip

    if gentle:
        if most_A > GENTLE_A:
            raise InputError(
                f"reverse.current_limit_A is {most_A:g}, but the supply of this bench trips at its "
                "current limit and cannot serve as a current source, so that a clamp's drop can be "
                f"read at {GENTLE_A:g} A at most: set it to {GENTLE_A:g}, or use a supply with an "
                "over-current level of its own"
            )
        drops = [
            replace(
                rung(f"clamp drop at {most_A:g} A", PROOF_V, PROOF_A, PROOF_A, -1.1 * PROOF_V),
                may_limit=False,
            )
        ]
    else:
        drops = [
            rung(
                f"clamp drop at {amps:g} A", drive_V, amps, 1.1 * amps + 0.05,
                -1.1 * drive_V if number == 0 else lowest_V,
            )
            for number, amps in enumerate(float(f"{share * most_A:.6g}") for share in SHARES)
        ]  # fmt: skip
    for envelope in (leakage, *drops):
        envelope.check(ceilings)
    return ClampPlan(
        leakage, tuple(drops), gentle, most_A, CAUTION.format(volts=volts, limit=limit),
        CROSSED_CAUTION.format(volts=drops[-1].voltage_V, limit=drops[-1].current_limit_A),
        forward.home, longest_cool_s(stage.file.heat.time_constant_s), settle_s, read_s,
    )  # fmt: skip


def _check(stage: Stage) -> None:
    """InputError for what a clamp's trial cannot do, or would break a part."""
    file, part, name = stage.file, stage.main_part, stage.main
    reverse, volts = file.reverse, file.stage.supply_max_V
    assert reverse is not None
    beside = sorted(reverse.model_fields_set - {"current_limit_A"})
    if beside:
        raise InputError(
            f"reverse.{beside[0]} is given, but a {file.stage.topology} conducts when it is "
            "reversed: its leakage is read at stage.supply_max_V the right way round, and its drop "
            "at currents up to reverse.current_limit_A; give that key only"
        )
    limit, leaks = min(LEAKAGE_LIMIT_A, reverse.current_limit_A), file.limits.leakage_max_A
    if leaks is not None and leaks >= limit:
        raise InputError(
            f"limits.leakage_max_A is {leaks:g}: it must be below {limit:g} A, the current limit "
            "at which a clamp's leakage is read; amperes, not milliamperes"
        )
    key, stands = (
        ("reverse_voltage_max_V", part.reverse_voltage_max_V)
        if isinstance(part, Diode) else ("stand_off_V", getattr(part, "stand_off_V", volts))
    )  # fmt: skip
    if volts > stands:
        raise InputError(
            f"stage.supply_max_V is {volts:g}, beyond parts.{name}.{key} {stands:g}: the clamp's "
            "leakage would be read beyond what it stands; give another part, or a lower voltage"
        )
    carried = [(f"parts.{name}.average_current_max_A", getattr(part, "average_current_max_A"))]  # noqa: B009  of a junction
    carried += [
        (f"parts.{reference}.rated_current_A", other.rated_current_A)
        for reference, other in file.parts.items()
        if isinstance(other, Fuse)
    ]
    for rating, most_A in carried:
        if reverse.current_limit_A > most_A:
            raise InputError(
                f"reverse.current_limit_A is {reverse.current_limit_A:g}, above {rating} "
                f"{most_A:g}: nothing is driven beyond a rating; give a lower one"
            )
