"""What a run will do, worked out before anything is switched on."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from benchkit.files import BenchFile
from benchkit.guard import Ceilings, Envelope
from benchkit.prediction.connections import surroundings
from benchkit.prediction.heat import working_point
from benchkit.prediction.scenarios import scenario
from benchkit.stage import Stage
from procedures.reverse_plan import ReversePlan, plan_reverse, steps_around

ZEROS = 8
REST_READINGS, REST_GAP_S = 8, 0.25
CAUTION = (
    "about to switch on {what}. Parts may be hot enough to burn; capacitors hold their charge "
    "after switching off; keep hands off the board, and a hand on the supply's own switch. Local "
    "codes and licensed practice come first."
)


@dataclass(frozen=True)
class Step:
    """One line of the plan."""

    name: str
    text: str
    seconds: float


@dataclass(frozen=True)
class Plan:
    """A whole run of one board."""

    steps: tuple[Step, ...]
    sweep: Envelope
    soak: Envelope | None
    largest_drop_V: float
    soak_stop_C: float
    """The soak is not begun when the measured loss would take the case beyond this."""
    cautions: tuple[str, ...]
    reverse: ReversePlan | None = None

    @property
    def seconds(self) -> float:
        """How long the run takes at most."""
        return sum(step.seconds for step in self.steps)

    def lines(self) -> Iterator[str]:
        """For `--dry-run`."""
        for number, step in enumerate(self.steps, start=1):
            yield f"{number}. {step.name} ({_spell(step.seconds)}): {step.text}"
        yield f"at most {_spell(self.seconds)} of bench time in all; no fuse is at risk"
        for caution in self.cautions:
            yield f"caution: {caution}"

    def document(self) -> dict[str, object]:
        """JSON-ready."""
        return {
            "steps": [vars(step) for step in self.steps],
            "seconds": self.seconds,
            "cautions": list(self.cautions),
            "fuses_at_risk": 0,
            "envelopes": [vars(envelope) for envelope in self._envelopes()],
        }

    def _envelopes(self) -> Iterator[Envelope]:
        yield self.sweep
        if self.soak is not None:
            yield self.soak
        if self.reverse is not None:
            yield from (*self.reverse.rungs, self.reverse.after)


def plan_board(stage: Stage, bench: BenchFile) -> Plan:
    """Lay out the run of one board; InputError when it would pass a ceiling of the bench."""
    file, ceilings = stage.file, Ceilings.of(bench.bench)
    working = file.stage
    supply, top = working.supply_nominal_V, file.sweep.currents_A[-1]
    hottest = working_point(stage, stage.corner(1), top, supply, working.ambient_nominal_C)
    worst_drop = float(np.nan_to_num(hottest.drop_V[0, 0], nan=1.0))
    # A part that does not work as it should (a channel that stays off) must still fit the range
    # and the envelope of a sweep, which is short: half the loss that would heat the junction to
    # its limit at once.
    part = stage.main_part
    room = part.junction_max_C - working.ambient_nominal_C
    loss_max = 0.5 * room / stage.junction_to_case_K_per_W
    case_max = min(ceilings.case_max_C, part.junction_max_C - 15.0)
    visits = 2 * len(file.sweep.currents_A) * file.sweep.repeats
    aperture = (
        sum(bench.points[p].aperture_nplc for p in ("drop", "exposed_current"))
        / bench.bench.line_frequency_Hz
    )
    sweep_s = visits * (bench.bench.settle_s + aperture)
    sweep = Envelope.around(
        "forward sweep",
        supply,
        top,
        ceilings,
        case_max_C=case_max,
        loss_max_W=loss_max,
        longest_s=60.0 + 5 * sweep_s,
    )
    steps = [
        Step("permissives", "calibration in date, outputs off, ports dead, sensors plausible", 1.0),
        Step(
            "rest",
            f"{REST_READINGS} readings of case and ambient, nothing on",
            REST_READINGS * REST_GAP_S,
        ),
        Step("polarity", "1 V at 50 mA: plus is plus, and the meters agree", 0.5),
        Step("zero", f"{ZEROS} zero readings of drop and current", ZEROS * aperture),
        Step(
            "forward sweep",
            f"{', '.join(f'{a:g}' for a in file.sweep.currents_A)} A, up and then down, "
            f"{file.sweep.repeats} time(s); {sweep.sentence()}",
            sweep_s,
        ),
        Step("zero", f"{ZEROS} zero readings again", ZEROS * aperture),
    ]
    soak = None
    if file.soak is not None:
        soak = Envelope.around(
            "soak",
            supply,
            file.soak.current_A,
            ceilings,
            case_max_C=case_max,
            loss_max_W=loss_max,
            longest_s=file.soak.longest_s + 120.0,
        )
        steps.append(
            Step(
                "soak",
                f"{file.soak.current_A:g} A until the final rise is known within "
                f"{file.soak.known_within_K:g} K, at most {file.soak.longest_s:g} s; left out if "
                f"the measured loss would take the case beyond {case_max - 5:.0f} C; "
                f"{soak.sentence()}",
                file.soak.longest_s,
            )
        )
    what = f"{supply:g} V at up to {top:g} A"
    right_way = scenario(stage, stage.corner(1), "right-way", surroundings(file))
    beyond = [
        f"{r.part} {r.rating} {r.value:.3g} of {r.limit:g} {r.unit}"
        for r in right_way.ratings
        if not r.holds
    ]
    if beyond:
        what += f" (BEYOND A DATASHEET RATING at the highest supply voltage: {', '.join(beyond)})"
    cautions = [CAUTION.format(what=what)]
    reverse = plan_reverse(stage, bench, sweep, aperture)
    if reverse is not None:
        steps += [Step(*step) for step in steps_around(reverse)]
        cautions.append(reverse.caution)
    return Plan(
        tuple(steps), sweep, soak, 1.3 * worst_drop, case_max - 5.0, tuple(cautions), reverse
    )


def _spell(seconds: float) -> str:
    if seconds < 1:
        return "under 1 s"
    return f"{seconds:.0f} s" if seconds < 120 else f"{seconds / 60:.0f} min"
