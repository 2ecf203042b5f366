"""A stage in one of its scenarios as a deck for SPICE."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from benchkit.circuit import GROUND
from benchkit.circuit.no_point import reason
from benchkit.errors import InputError
from benchkit.netlist import deck
from benchkit.parts.fuse_points import FuseModel
from benchkit.prediction.connections import (
    SCENARIOS,
    Conditions,
    Surroundings,
    levels,
    surroundings,
)
from benchkit.prediction.operating_point import OperatingPoint, connected, other_points, reached
from benchkit.prefixes import spoken
from benchkit.stage import Stage

LOWEST_C, HIGHEST_C = -80.0, 250.0

WHAT: Mapping[str, str] = {
    "reversed-source": "a source of {volts:g} V the wrong way round; on the guarded port a passive "
    "load",
    "reversed-source-charged": "a source of {volts:g} V the wrong way round; on the guarded port a "
    "load that holds {hold_V:g} V of its own",
    "reversed-battery-off": "a battery of {volts:g} V the wrong way round; the equipment is off",
    "reversed-battery-on": "a battery of {volts:g} V the wrong way round; the equipment is on, set "
    "to {set_V:g} V and {limit_A:g} A",
    "back-feed": "a battery of {volts:g} V the right way round; the equipment is off",
    "flat-battery": "a battery of {volts:g} V the right way round; the equipment is on, set to "
    "{set_V:g} V and {limit_A:g} A",
    "open": "nothing but a voltmeter; the equipment is on, set to {set_V:g} V and {limit_A:g} A",
}
RIGHT_WAY: Mapping[str, str] = {
    "load": "{volts:g} V the right way round; on the guarded port {amps:g} A are drawn",
    "supply": "{amps:g} A of charging current; on the guarded port {volts:g} V",
}


def scenario_deck(
    stage: Stage, name: str, ambient_C: float | None = None, *, others: bool = True
) -> str:
    """The last circuit of a scenario at the highest voltage that can drive it, with typical parts.

    A flat battery is as flat as the file says. ambient_C: of every part, -80 to 250; the stage's
    nominal one unless given. others: look for further operating points and tell them in the
    comments. InputError for another scenario or temperature.
    """
    warm = stage.file.stage.ambient_nominal_C if ambient_C is None else ambient_C
    point = scenario_point(stage, name, warm)
    return deck(
        point.circuit, point.solution.volts, f"{stage.file.stage.name}: {name}",
        _comments(stage, name, warm, point, others=others), _headings(stage),
    )  # fmt: skip


def scenario_point(stage: Stage, name: str, ambient_C: float) -> OperatingPoint:
    """The operating point that the deck holds, of one board (batch 1); errors as there."""
    if name not in SCENARIOS:
        raise InputError(f"scenario is {name!r}: it must be one of {', '.join(SCENARIOS)}")
    if not LOWEST_C <= ambient_C <= HIGHEST_C:
        raise InputError(
            f"ambient is {ambient_C:g} C: it must be from {LOWEST_C:g} to {HIGHEST_C:g}, where "
            "the parts' laws hold"
        )
    around = surroundings(stage.file)
    steps = connected(stage, around, name, _conditions(stage, around, name))
    return reached(stage, stage.typical(), steps, ambient_C, ambient_C)


def _conditions(stage: Stage, around: Surroundings, name: str) -> Conditions:
    driven = levels(stage, around, name)
    volts = driven[0] if name == "flat-battery" else driven[-1]
    return Conditions(np.array([volts]), np.array([stage.file.stage.current_max_A]))


def _comments(
    stage: Stage, name: str, warm: float, point: OperatingPoint, *, others: bool
) -> list[str]:
    around = surroundings(stage.file)
    at = _conditions(stage, around, name)
    what = RIGHT_WAY[stage.guards] if name == "right-way" else WHAT[name]
    values = {**vars(around), "volts": at.volts[0], "amps": at.amps[0]}
    lines = [
        f"topology {stage.file.stage.topology}, guarding a {stage.guards}; typical parts",
        f"on the exposed port {what.format(**values)}",
        f"every part is at {warm:g} C; its values are written as they are there, so leave .temp as "
        "it is",
        *around.assumed,
        *_joined(stage),
    ]
    fuses = [ref for ref, model in stage.models.items() if isinstance(model, FuseModel)]
    if fuses:
        lines.append(f"{' and '.join(fuses)}: as before it opens, if it does")
    without = reason(point.circuit, point.solution, 0)
    if without is not None:
        return [*lines, f".nodeset: where the suite stopped without an operating point; {without}"]
    lines.append(
        f".nodeset: the operating point that the suite found, "
        f"{spoken(float(point.exposed_A[0]), 'A')} into the exposed port and "
        f"{spoken(float(point.guarded_V[0]), 'V')} on the guarded one"
    )
    highest = max(float(at.volts[0]), around.set_V, around.hold_V)
    lines += [
        f"there is another operating point, {spoken(float(other.exposed_A[0]), 'A')} and "
        f"{spoken(float(other.guarded_V[0]), 'V')}: a simulator may find that one"
        for other in (other_points(point, highest) if others else [])
    ]
    return lines


def _joined(stage: Stage) -> list[str]:
    """Which terminals are one node."""
    at: dict[str, list[str]] = {}
    for terminal, node in vars(stage.ports).items():
        spelled = terminal.replace("_plus", "+").replace("_minus", "-")
        at.setdefault(node, []).append(spelled)
    return [
        f"{' and '.join(terminals)} {'is' if len(terminals) == 1 else 'are'} node {node}"
        for node, terminals in at.items()
        if node == GROUND or len(terminals) > 1
    ]


def _headings(stage: Stage) -> dict[str, str]:
    parts = {reference: f"{reference}, {part.kind}" for reference, part in stage.file.parts.items()}
    return {**parts, "exposed": "on the exposed port", "guarded": "on the guarded port"}
