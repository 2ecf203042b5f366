"""What a scenario means, in plain sentences."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from benchkit.files.parts import Diode, Tvs
from benchkit.prediction.connections import Conditions, Surroundings, levels
from benchkit.prediction.coordination import Coordination
from benchkit.prediction.operating_point import OperatingPoint, connected, reached
from benchkit.prefixes import lasting, spoken
from benchkit.stage import Stage

Floats = NDArray[np.float64]

PROTECTED_V, ONE_DROP_V = -0.1, -2.0
"""Guarded voltages above the first are as good as none; above the second, one forward drop."""
KEPT = 0.9
"""Of what the guarded side holds of its own, it is left with this much at least."""
FAR = 10.0
LEAST_A, FLOWS_A = 1e-9, 1e-3
STARTED = 0.1
"""A battery is being charged once this share of what the equipment can give flows into it."""
BURNS_W = 0.1
FLAT_STEPS = 40


def sentences(
    around: Surroundings, name: str, point: OperatingPoint, fuse: Coordination | None, *,
    outlived: bool,
) -> list[str]:  # fmt: skip
    """Plain sentences on the worst of the samples; ``outlived``: no part is asked too much."""
    if name.startswith("reversed"):
        said = _guarded_side(name, around, point)
        if not outlived and protected(name, around, point):
            said += ", as long as the parts outlive it"
        return [said, *_far_beyond(point), *_flow(point, fuse)]
    if name == "back-feed":
        return [_back_feed(point)]
    if name == "flat-battery":
        return [_flat(around, point), *_half_on(around, point)]
    if name == "open":
        return _open(around, point)
    return []


def protected(name: str, around: Surroundings, point: OperatingPoint) -> bool:
    """Whether the guarded side of every sample is spared, while the parts last."""
    if not name.startswith("reversed"):
        return True
    volts = float(point.guarded_V.min())
    if point.stage.conducts == "lead":
        return True
    return volts >= KEPT * own if (own := _own_V(name, around)) else volts > ONE_DROP_V


def _own_V(name: str, around: Surroundings) -> float | None:
    """What the guarded side holds of its own."""
    return {"reversed-battery-on": around.set_V, "reversed-source-charged": around.hold_V}.get(name)


def _guarded_side(name: str, around: Surroundings, point: OperatingPoint) -> str:
    volts, own = float(point.guarded_V.min()), _own_V(name, around)
    if own is not None and volts >= KEPT * own:
        return f"the guarded side keeps its own {spoken(volts, 'V')}: it is protected"
    if point.stage.conducts == "lead":
        return f"with {point.stage.main} conducting the guarded side sees {spoken(volts, 'V')}"
    if own is not None and volts > PROTECTED_V:
        return f"the guarded side's own {own:.3g} V is pulled down to {spoken(volts, 'V')}"
    if volts > PROTECTED_V:
        return f"the guarded side sees {spoken(volts, 'V')} at most in reverse: it is protected"
    if volts > ONE_DROP_V:
        return f"the guarded side sees {spoken(volts, 'V')} in reverse, no more than a forward drop"
    return f"the guarded side is pulled to {spoken(volts, 'V')}: it is not protected"


def _far_beyond(point: OperatingPoint) -> list[str]:
    """A forward drop carried far past the last printed point is a guess."""
    said = []
    for reference, part in point.stage.file.parts.items():
        if isinstance(part, Diode | Tvs):
            last = max(p.current_A for p in part.forward)
            amps = float(point.part(reference).current_A.max())
            if amps > FAR * last:
                said.append(
                    f"{reference}'s forward points end at {last:g} A: its drop at "
                    f"{spoken(amps, 'A')} is carried far beyond them"
                )
    return said


def _flow(point: OperatingPoint, fuse: Coordination | None) -> list[str]:
    amps = float(np.abs(point.exposed_A).max())
    if amps < FLOWS_A:
        return []
    if fuse is None:
        return [f"up to {spoken(amps, 'A')} flow for as long as they are connected"]
    if not np.isfinite(fuse.clears_in_s):
        return [f"up to {spoken(amps, 'A')} flow, and the fuse never opens"]
    opens = lasting(fuse.clears_in_s)
    return [
        f"up to {spoken(amps, 'A')} flow until the fuse opens, which takes {opens} at most, at the "
        "smallest current of the scenario"
    ]


def _back_feed(point: OperatingPoint) -> str:
    amps = float(point.exposed_A.max())
    if amps < FLOWS_A:
        if amps <= LEAST_A:
            return "the battery does not drain"
        return f"the battery drains by no more than {spoken(amps, 'A')}"
    return f"the battery drains into the equipment by {spoken(amps, 'A')}, {24 * amps:.2g} Ah a day"


def _open(around: Surroundings, point: OperatingPoint) -> list[str]:
    volts, stage = float(point.exposed_V.max()), point.stage
    said = [f"the open terminals show {spoken(volts, 'V')}"]
    if "sense" in stage.names and volts > 0.5 * around.set_V:
        remedy = "a smaller bleed resistor" if "bleed" in stage.names else (
            "a resistor from base to emitter (role bleed)"
        )  # fmt: skip
        said.append(
            "with nothing connected its own leakage can turn the switch on in some boards within "
            f"tolerance: {remedy} would keep it off"
        )
    return said


def _flat(around: Surroundings, point: OperatingPoint) -> str:
    count = len(levels(point.stage, around, "flat-battery"))
    given = -point.exposed_A[::count]
    least, amps = float(given.min()), float(given.max())
    if least >= STARTED * around.limit_A:
        much = spoken(least, "A")
        return f"a flat battery of {around.flat_V:.2g} V is charged, with {much} at least"
    starts = starts_from(point.stage, around)
    flow = f"no more than {spoken(amps, 'A')} flow" if amps > LEAST_A else "nothing flows"
    much = f"{flow} into a battery of {around.flat_V:.2g} V"
    if starts is None:
        return f"{much}, and it is not charged at any voltage up to {around.set_V:.3g} V"
    return f"{much}; a battery of {starts:.2g} V or more is charged (typical board)"


def _half_on(around: Surroundings, point: OperatingPoint) -> list[str]:
    """A switch that is neither on nor off while the battery recovers."""
    stage = point.stage
    rungs = levels(stage, around, "flat-battery")
    watts = point.part(stage.main).power_W
    worst = int(np.argmax(watts))
    if watts[worst] < BURNS_W:
        return []
    volts = rungs[worst % len(rungs)]
    return [
        f"with {volts:.2g} V in the battery {stage.main} burns up to {spoken(watts[worst], 'W')}, "
        "before it has warmed"
    ]


def starts_from(stage: Stage, around: Surroundings) -> float | None:
    """The lowest battery voltage from which a typical board charges it, to 10 mV."""
    low, high = 0.0, around.set_V
    while high - low > 0.01:
        volts = np.linspace(low, high, FLAT_STEPS)
        boards = stage.typical().repeated(volts.size)
        at = Conditions(volts, np.full(volts.size, around.limit_A))
        steps = connected(stage, around, "flat-battery", at)
        ambient = stage.file.stage.ambient_nominal_C
        given = -reached(stage, boards, steps, ambient, ambient).exposed_A
        good = given >= STARTED * around.limit_A
        if not good.any():
            return None
        first = int(np.argmax(good))
        low, high = float(volts[max(first - 1, 0)]), float(volts[first])
        if first == 0:
            break
    return high
