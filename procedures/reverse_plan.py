"""What the reverse trial will do: its ladder, an envelope a rung, and what it may not break."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from benchkit.circuit import Emf, Resistor
from benchkit.errors import InputError
from benchkit.files import BenchFile
from benchkit.files.bench import PointName
from benchkit.files.guarding import Thresholds
from benchkit.files.trials import Reverse
from benchkit.guard import Ceilings, Envelope
from benchkit.harness import Harness, reversed_from
from benchkit.prediction.connections import Connection, surroundings
from benchkit.prediction.operating_point import reached
from benchkit.prediction.scenarios import scenario
from benchkit.stage import Stage
from procedures.cooling import COOL_K, longest_cool_s

READINGS = 4
POINTS: tuple[PointName, ...] = (
    "exposed_voltage", "exposed_current", "guarded_voltage", "drop", "case",
)  # fmt: skip
"""Read together, READINGS times a rung, and at every polling interval of the dwell."""
WATCHED = (
    "the supply's own protection, its current limit being reached, case and its rise, the guarded "
    "port's sign, the supply's voltage against the meter's, energy, time"
)
BEYOND = 1.5
"""The guarded port trips this far beyond what it may do, so that a board a little outside its limit
is measured and judged, not only stopped (judgement)."""
UNLOADED_OHM = 1e6
"""Across a guarded port from which nothing is drawn: the input of a load that is off, and the meter
beside it (common practice, no source)."""
SMALL_RESISTOR_W = 0.25
"""What the commonest leaded resistor stands (common practice, no source)."""
SMALL_SHARE, SMALL_J = 0.1, 1.0
"""A stage that blocks lets next to nothing through: a step may take this share of what the current
limit would allow, and what a supply's read-back of no current adds up to (judgement)."""
CAUTION = (
    "about to apply {volts} V THE WRONG WAY ROUND to the exposed port: the supply's leads are "
    "crossed there, plus of the supply on the minus terminal, in {steps} step(s) from {first} V "
    "with a current limit of {limit} A. Wear eye protection: a part that does not stand it can "
    "burst. Nothing but the bench's load may be on the guarded port; keep hands off the board, and "
    "a hand on the supply's own switch. Local codes and licensed practice come first."
)


@dataclass(frozen=True)
class ReversePlan:
    """The trial of one board. rungs: rising in voltage, one energised step each; the last of them
    also lasts the dwell. drops: the forward sweep's currents that are measured again after it."""

    rungs: tuple[Envelope, ...]
    dwell_s: float
    after: Envelope
    drops_A: tuple[float, ...]
    caution: str
    cool_s: float
    """The longest that a case which the soak left hot is waited for."""
    rungs_s: float
    largest_A: float
    """What the current's range is chosen for: twice the limit, which takes a while to hold."""
    home: Harness
    harness: Harness
    """How the leads are while they are crossed."""

    @property
    def full_V(self) -> float:
        """The full reverse voltage."""
        return self.rungs[-1].voltage_V

    @property
    def crossing(self) -> str:
        """Which lead goes where, and what the resistor there has to stand."""
        told = [self.harness.sentence()]
        if watts := heating(self.harness.bleeder_ohm, self.full_V):
            told.append(watts)
        return ", ".join(told)

    def text(self) -> str:
        """For the plan."""
        ladder = ", ".join(f"{rung.voltage_V:g}" for rung in self.rungs)
        dwell = f", the last for {self.dwell_s:g} s" if self.dwell_s else ""
        last = self.rungs[-1]
        text = (
            f"{ladder} V the wrong way round{dwell}, off between them; a step that the supply has "
            f"to limit ends the trial. Last step: {last.sentence()}"
        )
        if last.guarded_min_V < -last.voltage_V:
            text += (
                "; by its datasheet the leakage of this stage may take a guarded port from which "
                "nothing is drawn all the way down, so there the current limit is what watches"
            )
        return f"{text}. What trips it: {WATCHED}"


def plan_reverse(
    stage: Stage, bench: BenchFile, sweep: Envelope, home: Harness, aperture_s: float
) -> ReversePlan | None:
    """The trial that the stage file asks for, if any.

    sweep: the envelope of the forward sweep, whose currents are measured again afterwards.
    aperture_s: how long one drop and current take. InputError when the full reverse voltage would
    pass a ceiling of the bench, or by prediction a rating of any part.
    """
    file = stage.file
    reverse, working = file.reverse, file.stage
    if reverse is None:
        return None
    full = working.supply_max_V if reverse.voltage_V is None else reverse.voltage_V
    # The last as it is written: full * steps / steps may be another number.
    ladder = [*(full * n / reverse.steps for n in range(1, reverse.steps)), full]
    bleeder = bench.bench.bleeder_ohm
    visits_s = READINGS * sum(
        bench.points[point].aperture_nplc / bench.bench.line_frequency_Hz for point in POINTS
    )
    rung_s = bench.bench.settle_s + watched_s(bench.bench.poll_s) + visits_s
    ceilings = Ceilings.of(bench)
    rungs = tuple(
        _rung(
            stage,
            reverse,
            volts,
            sweep,
            rung_s,
            reverse.dwell if volts == full else 0.0,
            bleeder,
            ceilings.thresholds,
        )
        for volts in ladder
    )
    for rung in rungs:
        rung.check(ceilings)
    _check_ratings(stage, full, reverse.current_limit_A)
    currents = file.sweep.currents_A
    nominal = min(currents, key=lambda a: abs(a - working.current_nominal_A))
    drops = tuple(sorted({currents[0], nominal, currents[-1]}))
    after_s = 60.0 + 5 * len(drops) * (bench.bench.settle_s + aperture_s)
    after = again(sweep, "drop after the reverse trial", after_s)
    caution = CAUTION.format(
        volts=f"{full:g}",
        steps=reverse.steps,
        first=f"{ladder[0]:g}",
        limit=f"{reverse.current_limit_A:g}",
    )
    if watts := heating(bleeder, full):
        caution += f" The resistor across the guarded port of {bleeder:g} ohm is to be {watts}."
    return ReversePlan(
        rungs, reverse.dwell, after, drops, caution, longest_cool_s(file.heat.time_constant_s),
        len(rungs) * rung_s + reverse.dwell, 2 * reverse.current_limit_A,
        home, reversed_from(home, bleeder),
    )  # fmt: skip


def again(sweep: Envelope, name: str, longest_s: float) -> Envelope:
    """A few drops more, inside the envelope of the sweep."""
    energy = sweep.voltage_V * sweep.current_limit_A * longest_s
    return replace(sweep, name=name, longest_s=longest_s, energy_max_J=energy)


def heating(bleeder_ohm: float | None, full_V: float) -> str:
    """What the resistor has to stand where the stage does not block, if that is much; else ""."""
    watts = full_V**2 / bleeder_ohm if bleeder_ohm is not None else 0.0
    if watts <= SMALL_RESISTOR_W:
        return ""
    return f"one that stands {watts:.3g} W, which a stage that does not block puts into it"


def steps_around(plan: ReversePlan) -> tuple[tuple[str, str, float], ...]:
    """Name, text and seconds of every step of the plan, in order."""
    drops = ", ".join(f"{amps:g}" for amps in plan.drops_A)
    proof = "1 V at 50 mA: the leads are as said, and the meters agree"
    ports = "outputs confirmed off and both ports dead before a lead is touched; with nothing on"
    cold = f"nothing on, until the case is within {COOL_K:g} K of where it was at rest"
    return (
        ("cool", cold, plan.cool_s),
        ("leads crossed", f"{ports}, {plan.crossing}", 1.0),
        ("zero/reverse", "zero readings of exposed current and both ports' voltages", 1.0),
        ("polarity/reversed", f"{proof}; a stage that conducts is not asked for more", 0.5),
        ("reverse trial", plan.text(), plan.rungs_s),
        ("leads put back", f"{ports}, {plan.home.sentence()}", 1.0),
        ("polarity", proof, 0.5),
        ("after", f"drop at {drops} A again, to see what the trial did to the part", 1.0),
    )


def watched_s(poll_s: float) -> float:
    """How long a rung stands before it is read: the guard looks at the two ports by turns, and a
    board that does not block is not to reach the next rung between two looks."""
    return 2 * poll_s


def _rung(
    stage: Stage,
    reverse: Reverse,
    volts: float,
    sweep: Envelope,
    rung_s: float,
    dwell_s: float,
    bleeder_ohm: float | None,
    thresholds: Thresholds,
) -> Envelope:
    longest_s = 60.0 + 5 * rung_s + 2 * dwell_s
    limit = reverse.current_limit_A
    return Envelope(
        f"reverse {volts:g} V",
        volts,
        limit,
        1.1 * volts + 0.5,
        # Not above the limit: some supplies have no level of their own, and trip at the limit.
        limit,
        sweep.case_max_C,
        sweep.loss_max_W,
        longest_s,
        may_limit=False,
        guarded_min_V=_guarded_min_V(stage, volts, bleeder_ohm, thresholds),
        case_rise_max_K_per_s=thresholds.case_rise_max_K_per_s,
        energy_max_J=SMALL_J + SMALL_SHARE * volts * limit * longest_s,
    )


def _guarded_min_V(
    stage: Stage, volts: float, bleeder_ohm: float | None, thresholds: Thresholds
) -> float:
    """Where the guarded port trips: beyond its limit, and beyond what the leakage that the sheet
    allows does to a port from which nothing is drawn.

    The second matters for a Schottky diode: its microamperes alone take such a port down by volts,
    and do no harm. A resistor there keeps it where a leak can be told from it.
    """
    limit = stage.file.limits.guarded_reverse_max_V
    boards = stage.draw(2, 0, corners=True)
    ports = stage.ports
    source = Emf(
        "exposed.source", (ports.exposed_minus, ports.exposed_plus), np.full(2, volts), 0.05
    )
    ohms = UNLOADED_OHM if bleeder_ohm is None else 1 / (1 / UNLOADED_OHM + 1 / bleeder_ohm)
    unloaded = Resistor("guarded.load", (ports.guarded_plus, ports.guarded_minus), ohms)
    ambient = stage.file.stage.ambient_nominal_C
    point = reached(stage, boards, [Connection((source,), (unloaded,))], ambient, ambient)
    leaks = -float(point.guarded_V.min())
    return round(-BEYOND * max(-thresholds.guarded_min_V if limit is None else limit, leaks), 3)


def _check_ratings(stage: Stage, volts: float, limit_A: float) -> None:
    """InputError when ``volts`` the wrong way round would take a part beyond a rating: nothing is
    energised that is predicted to break what is being measured."""
    file = stage.file
    working = file.stage.model_copy(update={"supply_min_V": volts, "supply_max_V": volts})
    trial = replace(stage, file=file.model_copy(update={"stage": working}))
    around = replace(surroundings(file), source_limit_A=limit_A)
    found = scenario(trial, trial.draw(2, 0, corners=True), "reversed-source", around)
    beyond = [one for one in found.ratings if not one.holds]
    if not beyond:
        return
    worst = max(beyond, key=lambda one: one.value / one.limit if one.limit else math.inf)
    given = file.reverse is not None and file.reverse.voltage_V is not None
    key = "reverse.voltage_V" if given else "reverse.voltage_V, taken from stage.supply_max_V,"
    raise InputError(
        f"{key} is {volts:g}: {worst.sentence()}. Nothing is energised that is predicted to break "
        "a part: give a lower reverse.voltage_V, or leave [reverse] out"
    )
