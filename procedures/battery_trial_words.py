"""What a battery trial says before it begins, and what it may not break."""

from __future__ import annotations

import math

from benchkit.errors import InputError
from benchkit.evaluation.battery_trial_circuits import BACK, FLAT, OFF, ON, Around, battery_A
from benchkit.prediction.operating_point import OperatingPoint
from benchkit.prediction.part_state import own_elements
from benchkit.prediction.ratings import part_ratings, rating
from benchkit.prefixes import spoken
from benchkit.stage import Stage

CAUTION = (
    "about to connect what stands for a battery to the exposed port, {how}: {volts} V with a "
    "current limit of {limit} A{beside}. {bleeder} Do not put a real battery in its place: nothing "
    "would limit its current, and it can gas and spill. Wear eye protection: a part that does not "
    "stand it can burst. Keep hands off the board, and a hand on both supplies' own switches. "
    "Local codes and licensed practice come first."
)


def expected(around: Around, name: str, worst: OperatingPoint) -> str:
    """What the corners of the datasheets promise, for the plan."""
    amps = battery_A(name, worst.exposed_A)
    way = "into the battery" if name == FLAT else "out of the battery"
    told = (
        f"{_small(float(amps.min()))} to {_small(float(amps.max()))} {way}, the guarded port at "
        f"{spoken(float(worst.guarded_V.min()), 'V')}"
    )
    if name == FLAT:
        told += (
            f"; a stand-in that is charged sinks nothing, so its resistor takes it to "
            f"{spoken(float(worst.exposed_V.max()), 'V')}, and through a board that does not "
            f"block to {around.driven_V:.3g} V"
        )
    return told


def _small(amps: float) -> str:
    return spoken(amps, "A") if abs(amps) >= 1e-9 else "0 A"


def caution(around: Around, name: str) -> str:
    """Asked before a state, once its leads are as it wants them."""
    most = max(around.emf_V, around.driven_V if name == FLAT else 0.0)
    beside = (
        f", and beside it the supply at the guarded port: {around.set_V:g} V with a current limit "
        f"of {around.supply_A:.3g} A" if name in (ON, FLAT) else ""
    )  # fmt: skip
    bleeder = (
        f"The resistor across it of {around.standin_ohm:g} ohm is to stand "
        f"{most**2 / around.standin_ohm:.2g} W."
    )
    if name in (OFF, BACK) and around.off_ohm is not None:
        bleeder += (
            f" The one across the guarded port of {around.off_ohm:g} ohm is to stand "
            f"{min(around.emf_V**2 / around.off_ohm, around.emf_V * around.battery_A):.2g} W."
        )
    if name == ON:
        bleeder += (
            " Through a stage that is on before the battery comes, the supply drives the stand-in "
            f"backwards with up to {around.supply_A:.3g} A: its output needs the diode across it "
            "that bench supplies have for that."
        )
    turned = "THE WRONG WAY ROUND" if name in (OFF, ON) else "the right way round"
    return CAUTION.format(
        how=turned, volts=f"{around.volts(name)[-1]:g}", limit=f"{around.battery_A:g}",
        beside=beside, bleeder=bleeder,
    )  # fmt: skip


def check_ratings(stage: Stage, name: str, worst: OperatingPoint, seconds: float) -> None:
    """InputError when a state would take a part beyond a rating: nothing is energised that is
    predicted to break what is being measured."""
    beyond = []
    for reference, nodes in stage.wiring.parts.items():
        own = own_elements(worst.circuit.elements, reference)
        beyond += [
            one
            for one in part_ratings(
                reference, stage.file.parts[reference], nodes, worst.part(reference), own,
                worst.solution.volts, lasts=True,
            )
            if not one.holds
        ]  # fmt: skip
    heat, file = stage.file.heat, stage.file
    warmed = heat.case_to_ambient_max_K_per_W * -math.expm1(-seconds / heat.time_constant_s)
    rise = (stage.junction_to_case_K_per_W + warmed) * worst.part(stage.main).power_W
    junction = rating(
        stage.main, "junction temperature", "C", file.stage.ambient_nominal_C + rise,
        stage.main_part.junction_max_C,
    )  # fmt: skip
    if not junction.holds:
        beyond.append(junction)
    if not beyond:
        return
    one = max(beyond, key=lambda r: r.value / r.limit if r.limit else math.inf)
    remedy = "a lower battery_trial.current_limit_A, or " if one is junction else ""
    raise InputError(
        f"battery_trial.scenarios has {name}: there {one.sentence()}. Nothing is energised that "
        f"is predicted to break a part: give {remedy}battery_trial.scenarios without it"
    )
