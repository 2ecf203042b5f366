"""What a run will do, worked out before anything is switched on."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np

from benchkit.errors import InputError
from benchkit.evaluation.clamp_trial_band import CLAMPS
from benchkit.files import BenchFile
from benchkit.guard import Ceilings, Drive, Envelope
from benchkit.harness import Harness
from benchkit.prediction.connections import surroundings
from benchkit.prediction.heat import working_point
from benchkit.prediction.scenarios import scenario
from benchkit.stage import Stage
from procedures.battery_trial import BatteryTrialRun
from procedures.battery_trial_plan import plan_battery_trial
from procedures.checks import checks_of
from procedures.clamp_trial import ClampTrial
from procedures.clamp_trial_plan import plan_clamp
from procedures.fused_trial import FusedTrial
from procedures.fused_trial_plan import plan_fused
from procedures.reverse import ReverseTrial
from procedures.reverse_plan import plan_reverse
from procedures.supply_sweep import SupplySweepTrial
from procedures.supply_sweep_plan import plan_supply_sweep
from procedures.sweep import REST_GAP_S, REST_READINGS
from procedures.trial import ZEROS, Forward, Step, Trial, home_of

KICK_SHARE, KICK_A = 0.8, 0.2
"""Of the supply's voltage, and the current limit, that a battery's stand-in shows to a stage which
waits for one: enough to be seen, too little to feed the load (judgement)."""
CAUTION = (
    "about to switch on {what}. Parts may be hot enough to burn; capacitors hold their charge "
    "after switching off; keep hands off the board, and a hand on the supply's own switch. Local "
    "codes and licensed practice come first."
)


@dataclass(frozen=True)
class Plan:
    """A whole run of one board."""

    forward: Forward
    own_steps: tuple[Step, ...]
    """Those of sweep and soak."""
    soak: Envelope | None
    soak_stop_C: float
    """The soak is not begun when the measured loss would take the case beyond this."""
    trials: tuple[Trial, ...]
    checks: tuple[str, ...]
    """What the guard will check, and when."""

    @property
    def steps(self) -> tuple[Step, ...]:
        """All, in order."""
        return (*self.own_steps, *(step for trial in self.trials for step in trial.steps))

    @property
    def cautions(self) -> tuple[str, ...]:
        """All that will be asked, in order."""
        asked = (self.forward.caution, *(c for trial in self.trials for c in trial.cautions))
        return tuple(dict.fromkeys(asked))

    @property
    def envelopes(self) -> tuple[Envelope, ...]:
        """Of every energised step above the proof of polarity."""
        soak = () if self.soak is None else (self.soak,)
        return (self.forward.sweep, *soak, *(e for trial in self.trials for e in trial.envelopes))

    @property
    def harnesses(self) -> tuple[Harness, ...]:
        """How the leads will be, in order."""
        return (self.forward.home, *(h for trial in self.trials for h in trial.harnesses))

    @property
    def fuses_at_risk(self) -> int:
        """How many fuses it can cost."""
        return sum(trial.fuses_at_risk for trial in self.trials)

    @property
    def seconds(self) -> float:
        """How long the run takes at most."""
        return sum(step.seconds for step in self.steps)

    def lines(self) -> Iterator[str]:
        """For `--dry-run`."""
        for number, step in enumerate(self.steps, start=1):
            yield f"{number}. {step.name} ({_spell(step.seconds)}): {step.text}"
        at_risk = f"{self.fuses_at_risk} fuse(s)" if self.fuses_at_risk else "no fuse"
        yield f"at most {_spell(self.seconds)} of bench time in all; {at_risk} at risk"
        for check in self.checks:
            yield f"guard: {check}"
        for caution in self.cautions:
            yield f"caution: {caution}"

    def document(self) -> dict[str, object]:
        """JSON-ready."""
        return {
            "steps": [vars(step) for step in self.steps],
            "seconds": self.seconds,
            "cautions": list(self.cautions),
            "fuses_at_risk": self.fuses_at_risk,
            "checks": list(self.checks),
            "harnesses": [harness.sentence() for harness in self.harnesses],
            "envelopes": [asdict(envelope) for envelope in self.envelopes],
        }


def plan_board(stage: Stage, bench: BenchFile, folder: Path | None = None) -> Plan:
    """Lay out the run of one board; InputError when it would pass a ceiling of the bench, or needs
    what the bench does not have."""
    file, ceilings = stage.file, Ceilings.of(bench)
    working = file.stage
    supply, top = working.supply_nominal_V, file.sweep.currents_A[-1]
    home, kick = home_of(stage), _kick(stage, bench)
    # A part that does not work as it should (a channel that stays off) must still fit the range
    # and the envelope of a sweep, which is short: half the loss that would heat the junction to
    # its limit at once.
    part = stage.main_part
    room = part.junction_max_C - working.ambient_nominal_C
    loss_max = 0.5 * room / stage.junction_to_case_K_per_W
    case_max = min(ceilings.case_max_C, part.junction_max_C - 15.0)
    visits = 2 * len(file.sweep.currents_A) * file.sweep.repeats
    aperture = aperture_s(bench)
    sweep_s = visits * (bench.bench.settle_s + aperture)

    def envelope(name: str, largest_A: float, longest_s: float) -> Envelope:
        return Envelope.around(
            name, supply, largest_A, ceilings, case_max_C=case_max, loss_max_W=loss_max,
            longest_s=longest_s, beside=kick,
        )  # fmt: skip

    sweep = envelope("forward sweep", top, 60.0 + 5 * sweep_s)
    steps = [
        Step("permissives", "calibration in date, outputs off, ports dead, sensors plausible", 1.0),
        Step(
            "rest",
            f"{REST_READINGS} readings of case and ambient, nothing on",
            REST_READINGS * REST_GAP_S,
        ),
        Step("polarity", f"{home.sentence()}; 1 V at 50 mA: plus is plus, and the meters agree",
             0.5),
        Step("zero", f"{ZEROS} zero readings of drop and current", ZEROS * aperture),
        Step(
            "forward sweep",
            f"{', '.join(f'{a:g}' for a in file.sweep.currents_A)} A, up and then down, "
            f"{file.sweep.repeats} time(s); {sweep.sentence()}",
            sweep_s,
        ),
        Step("zero", f"{ZEROS} zero readings again", ZEROS * aperture),
    ]  # fmt: skip
    soak = None
    if file.soak is not None:
        soak = envelope("soak", file.soak.current_A, file.soak.longest_s + 120.0)
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
    forward = Forward(home, sweep, 1.3 * _worst_drop_V(stage), _caution(stage))
    return Plan(
        forward, tuple(steps), soak, case_max - 5.0, tuple(_trials(stage, bench, forward, folder)),
        checks_of(bench),
    )  # fmt: skip


def _trials(
    stage: Stage, bench: BenchFile, forward: Forward, folder: Path | None = None
) -> Iterator[Trial]:
    """What the stage file asks for beside sweep and soak, in the order in which it is done: what
    may hurt the part comes last. folder: of the bench file, for dialects given by their path."""
    supply_sweep = plan_supply_sweep(stage, bench, forward.sweep, aperture_s(bench))
    if supply_sweep is not None:
        yield SupplySweepTrial(supply_sweep)
    if stage.file.stage.topology in CLAMPS:
        clamp = plan_clamp(stage, bench, forward, folder)
        if clamp is not None:
            yield ClampTrial(clamp)
        fused = plan_fused(stage, bench, forward, clamp, folder)
        if fused is not None:
            yield FusedTrial(fused)
    else:
        reverse = plan_reverse(stage, bench, forward.sweep, forward.home, aperture_s(bench))
        if reverse is not None:
            yield ReverseTrial(reverse)
    battery = plan_battery_trial(stage, bench, forward.sweep, forward.home, folder)
    if battery is not None:
        yield BatteryTrialRun(battery)


def aperture_s(bench: BenchFile) -> float:
    """How long one drop and current take to read."""
    nplc = sum(bench.points[p].aperture_nplc for p in ("drop", "exposed_current"))
    return nplc / bench.bench.line_frequency_Hz


def _kick(stage: Stage, bench: BenchFile) -> Drive | None:
    """What a battery's stand-in shows to a stage that waits for one; its own protection stands
    where the supply's does, which drives it from outside once the stage is on."""
    if "battery" not in home_of(stage).exposed:
        return None
    if bench.battery is None:
        raise InputError(
            f'stage.topology is "{stage.file.stage.topology}": it switches itself on only while '
            'it sees a battery, so the bench needs a second supply with stands_for = "battery"'
        )
    supply = stage.file.stage.supply_nominal_V
    return Drive(KICK_SHARE * supply, KICK_A, 1.1 * supply + 0.5, KICK_A, may_limit=True)


def _worst_drop_V(stage: Stage) -> float:
    """Of the worst part at the highest current of the sweep; a guess where it runs away."""
    working = stage.file.stage
    top = stage.file.sweep.currents_A[-1]
    hottest = working_point(
        stage, stage.corner(1), top, working.supply_nominal_V, working.ambient_nominal_C
    )
    return float(np.nan_to_num(hottest.drop_V[0, 0], nan=1.0))


def _caution(stage: Stage) -> str:
    """Of the forward steps."""
    working = stage.file.stage
    what = f"{working.supply_nominal_V:g} V at up to {stage.file.sweep.currents_A[-1]:g} A"
    right_way = scenario(stage, stage.corner(1), "right-way", surroundings(stage.file))
    beyond = [
        f"{r.part} {r.rating} {r.value:.3g} of {r.limit:g} {r.unit}"
        for r in right_way.ratings
        if not r.holds
    ]
    if beyond:
        what += f" (BEYOND A DATASHEET RATING at the highest supply voltage: {', '.join(beyond)})"
    return CAUTION.format(what=what)


def _spell(seconds: float) -> str:
    if seconds < 1:
        return "under 1 s"
    return f"{seconds:.0f} s" if seconds < 120 else f"{seconds / 60:.0f} min"
