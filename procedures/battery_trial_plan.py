"""What the battery trial will do: its states, an envelope each, and what it may not break."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from benchkit.errors import InputError
from benchkit.evaluation.battery_trial_circuits import (
    BACK,
    FLAT,
    OFF,
    ON,
    ORDER,
    Around,
    Spread,
    around_of,
    battery_A,
    over_voltage_V,
    solved,
)
from benchkit.files import BenchFile
from benchkit.files.bench import PointName
from benchkit.guard import Ceilings, Drive, Envelope
from benchkit.harness import NAMES, Harness, Source
from benchkit.stage import Stage
from procedures.battery_trial_words import caution, check_ratings, expected
from procedures.cooling import COOL_K, longest_cool_s
from procedures.limiting import trips_at_limit
from procedures.trial import ZEROS, Step

READINGS = 4
POINTS: tuple[PointName, ...] = (
    "exposed_voltage", "exposed_current", "guarded_voltage", "drop", "case",
)  # fmt: skip
"""Read together, READINGS times a state, and at every polling interval of the dwell."""
BEYOND = 1.5
"""The guarded port trips this far beyond what it may do, so that a board a little outside is
measured and judged, not only stopped (judgement)."""
LEVEL_SHARE, LEVEL_A = 1.01, 0.008
"""Over-current stands so little above a limit that is expected to be reached: just beyond what a
supply's own limit is off by, and near enough for one whose level is its limit."""
TOUCH_V = 60.0
"""Above this DC is hazardous to touch, and the two sources may come to be in series."""
WORDS = {
    OFF: "battery reversed, equipment off",
    ON: "battery reversed, equipment on",
    FLAT: "battery flat, equipment on",
    BACK: "battery right way round, equipment off",
}


@dataclass(frozen=True)
class StatePlan:
    """envelopes: one energised step each, at ``volts`` of the stand-in. conducts: by prediction a
    board within tolerance may, so that a proof which it does not block is no reason to stop."""

    name: str
    harness: Harness
    volts: tuple[float, ...]
    envelopes: tuple[Envelope, ...]
    conducts: bool
    expected: str
    caution: str

    @property
    def equipment_on(self) -> bool:
        """The supply is switched on first, the stand-in after it."""
        return self.name in (ON, FLAT)


@dataclass(frozen=True)
class BatteryPlan:
    """The trial of one board."""

    states: tuple[StatePlan, ...]
    around: Around
    dwell_s: float
    step_s: float
    """How long one energised step takes beside the dwell."""
    cool_s: float
    home: Harness

    def steps(self) -> Iterator[Step]:
        """For the plan, in order."""
        ports = "outputs confirmed off and both ports dead before a lead is touched"
        proof = "every source in turn, 1 V at 50 mA: the leads are as said, and the meters agree"
        yield Step("cool", f"nothing on, until the case is within {COOL_K:g} K of where it was at "
                   "rest", self.cool_s)  # fmt: skip
        for state in self.states:
            yield Step(f"battery/leads/{state.name}", f"{ports}; {state.harness.sentence()}", 1.0)
            yield Step(f"zero/battery/{state.name}", f"{ZEROS} zero readings", 1.0)
            yield Step(
                "polarity/reversed" if state.harness.crossed else "polarity",
                f"{proof}; a stage that conducts there and should not is asked for no more"
                if state.harness.crossed else proof,
                1.0,
            )  # fmt: skip
            yield Step(
                f"battery/{state.name}", self._text(state),
                len(state.envelopes) * self.step_s + self.dwell_s * (state.name != FLAT),
            )  # fmt: skip
        yield Step("leads put back", f"{ports}, {self.home.sentence()}", 1.0)
        yield Step("polarity", proof, 0.5)

    def _text(self, state: StatePlan) -> str:
        volts = ", ".join(f"{v:g}" for v in state.volts)
        order = "the supply, and then the stand-in" if state.equipment_on else "the stand-in"
        stays = (
            "off between them, until one is charged" if state.name == FLAT
            else f"for {self.dwell_s:g} s, unless it conducts"
        )  # fmt: skip
        return (
            f"{WORDS[state.name]}: {order} at {volts} V, {stays}. Expected: {state.expected}. "
            f"{state.envelopes[-1].sentence()}"
        )


def plan_battery_trial(
    stage: Stage, bench: BenchFile, sweep: Envelope, home: Harness, folder: Path | None = None
) -> BatteryPlan | None:
    """The trial that the stage file asks for, if any.

    sweep: the envelope of the forward sweep. folder: the bench file's. InputError where the bench
    lacks what it needs, where the stand-in would be driven to where it must not be, and where a
    step would pass a ceiling of the bench or, by prediction, a rating of any part.
    """
    trial = stage.file.battery_trial
    if trial is None:
        return None
    around, ceilings = around_of(stage.file, bench), Ceilings.of(bench)
    if around.emf_V + around.set_V > TOUCH_V:
        raise InputError(
            f"battery.emf_max_V is {around.emf_V:g} and equipment.set_V {around.set_V:g}: with "
            f"the battery reversed they may add up to more than {TOUCH_V:g} V, which is hazardous "
            "to touch; leave [battery_trial] out"
        )
    visits_s = READINGS * sum(
        bench.points[point].aperture_nplc / bench.bench.line_frequency_Hz for point in POINTS
    )
    step_s = bench.bench.settle_s * 2 + 2 * bench.bench.poll_s + visits_s
    states = []
    for name in ORDER:
        if name in trial.scenarios:
            planned = _state(stage, around, name, sweep, step_s, trial.dwell_s, ceilings)
            for envelope in planned.envelopes:
                envelope.check(ceilings)
            states.append(planned)
    _check_limiting(stage, bench, states, folder)
    return BatteryPlan(
        tuple(states), around, trial.dwell_s, step_s,
        longest_cool_s(stage.file.heat.time_constant_s), home,
    )  # fmt: skip


def _check_limiting(
    stage: Stage, bench: BenchFile, states: Sequence[StatePlan], folder: Path | None
) -> None:
    """InputError for a clamp, which has to conduct, where what limits the current would trip."""
    if stage.conducts != "lead":
        return
    crossed = [state for state in states if state.harness.crossed]
    sources: dict[Source, bool] = {
        "battery": bool(crossed), "supply": any(state.equipment_on for state in crossed),
    }  # fmt: skip
    for source, limits in sources.items():
        if limits and trips_at_limit(bench, folder, source):
            raise InputError(
                f"battery_trial.scenarios has {crossed[0].name}: {stage.main} conducts all that "
                f"{NAMES[source]} gives there, whose dialect takes the current limit for its "
                "over-current protection, so it would trip; use a supply with a level of its own, "
                "or leave the reversed scenarios out"
            )


def harness_of(around: Around, name: str) -> Harness:
    """How the leads are in a state."""
    on = name in (ON, FLAT)
    return Harness(
        ("battery",), ("supply",) if on else (), crossed=name in (OFF, ON),
        bleeder_ohm=None if on else around.off_ohm,
    )  # fmt: skip


def _state(
    stage: Stage, around: Around, name: str, sweep: Envelope, step_s: float, dwell_s: float,
    ceilings: Ceilings,
) -> StatePlan:  # fmt: skip
    volts = around.volts(name)
    ambient = stage.file.stage.ambient_nominal_C
    corners, rungs = stage.draw(2, 0, corners=True), len(volts)
    worst = solved(
        stage, corners.repeated(rungs), around, name, np.tile(np.array(volts), corners.size),
        Spread(), ambient,
    )  # fmt: skip
    conducts = float(battery_A(name, worst.exposed_A).max()) >= around.flows_A(name)
    longest_s = step_s + (0.0 if conducts or name == FLAT else dwell_s)
    check_ratings(stage, name, worst, longest_s)
    lowest = min(ceilings.thresholds.guarded_min_V, float(worst.guarded_V.min()))
    envelopes = tuple(
        _envelope(around, name, v, sweep, 60.0 + 5 * step_s + 2 * dwell_s,
                  ceilings, round(BEYOND * lowest, 3))
        for v in volts
    )  # fmt: skip
    return StatePlan(
        name, harness_of(around, name), volts, envelopes, conducts,
        expected(around, name, worst), caution(around, name),
    )  # fmt: skip


def _envelope(
    around: Around, name: str, volts: float, sweep: Envelope, longest_s: float,
    ceilings: Ceilings, guarded_min_V: float,
) -> Envelope:  # fmt: skip
    battery = Drive(
        volts, around.battery_A, over_voltage_V(around.emf_V), _level_A(around.battery_A),
        may_limit=True,
    )  # fmt: skip
    supply = Drive(
        around.set_V, around.supply_A, over_voltage_V(around.set_V), _level_A(around.supply_A),
        may_limit=True,
    )  # fmt: skip
    on = name in (ON, FLAT)
    own = supply if on else battery
    watts = volts * around.battery_A + (around.set_V * around.supply_A if on else 0.0)
    return Envelope(
        f"{name}, {volts:g} V", own.voltage_V, own.current_limit_A, own.over_voltage_V,
        own.over_current_A, sweep.case_max_C, sweep.loss_max_W, longest_s, may_limit=True,
        guarded_min_V=guarded_min_V,
        case_rise_max_K_per_s=ceilings.thresholds.case_rise_max_K_per_s,
        energy_max_J=watts * longest_s, source="supply" if on else "battery",
        beside=battery if on else None,
    )  # fmt: skip


def _level_A(limit_A: float) -> float:
    return LEVEL_SHARE * limit_A + LEVEL_A
