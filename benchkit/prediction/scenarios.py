"""Ways the exposed port can be connected, and what each part then stands.

Each scenario is solved over the tolerance samples at its worst supply voltage and current, and
every rating is compared with the worst sample.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import GROUND, CurrentLoad, Network, Resistor, Solution, network, solve
from benchkit.circuit.network import Element
from benchkit.files.parts import Diode, PMosfet
from benchkit.files.parts import Resistor as ResistorPart
from benchkit.prediction.heat import BEYOND_C, working_point
from benchkit.stage import Sample, Stage
from benchkit.topologies.base import EXPOSED, GUARDED

Floats = NDArray[np.float64]

SOLVED = 1e-6
"""A figure at its rating holds: what the solver leaves over must not say otherwise."""
SCENARIOS = ("right-way", "reversed-source")


@dataclass(frozen=True)
class PartState:
    """What one part stands, the sample that stands most (magnitudes keep their sign)."""

    voltage_V: float
    current_A: float
    power_W: float


@dataclass(frozen=True)
class Rating:
    """One rating of one part against the worst that the scenario asks of it."""

    part: str
    rating: str
    unit: str
    value: float
    limit: float
    margin: float
    holds: bool


@dataclass(frozen=True)
class Scenario:
    """Answers for one way of connecting."""

    name: str
    exposed_current_A: float
    guarded_V: float
    parts: dict[str, PartState]
    ratings: list[Rating]
    notes: list[str]

    def document(self) -> dict[str, object]:
        """As JSON-ready values."""
        return asdict(self)


def scenario(stage: Stage, sample: Sample, name: str) -> Scenario:
    """Answer one scenario; ValueError for a name that is not in SCENARIOS."""
    working = stage.file.stage
    if name == "right-way":
        # Both ends of the supply: a channel gets hottest where its gate is driven least.
        ends = np.array([working.supply_min_V, working.supply_max_V])
        point = working_point(stage, sample, working.current_max_A, ends, working.ambient_max_C)
        junction = np.nan_to_num(point.junction_C, nan=BEYOND_C).max(axis=1)
        load: list[Element] = [CurrentLoad("load", (GUARDED, GROUND), working.current_max_A)]
        circuit = network([*stage.elements(sample, junction), *load],
                          held={EXPOSED: working.supply_max_V})  # fmt: skip
        solution = solve(circuit, sample.size, start={GUARDED: working.supply_max_V - 0.5})
        extra = [_junction_rating(stage, junction)]
    elif name == "reversed-source":
        ohms = working.supply_nominal_V / working.current_nominal_A
        load = [Resistor("load", (GUARDED, GROUND), ohms)]
        circuit = network([*stage.elements(sample, working.ambient_max_C), *load],
                          held={EXPOSED: -working.supply_max_V})  # fmt: skip
        solution = solve(circuit, sample.size)
        extra = []
    else:
        raise ValueError(f"{name!r} is not a scenario: one of {', '.join(SCENARIOS)}")
    guarded = solution.volts[GUARDED]
    current = _into(circuit, solution, EXPOSED)
    parts = {ref: _worst(circuit, solution, ref) for ref in stage.models}
    ratings = [r for ref in stage.models for r in _ratings(stage, circuit, solution, ref)] + extra
    worst = int(np.argmax(np.abs(guarded))) if name == "reversed-source" else int(guarded.argmin())
    return Scenario(
        name, float(current[np.argmax(np.abs(current))]), float(guarded[worst]), parts, ratings,
        _notes(name, ratings, float(guarded[worst])),
    )  # fmt: skip


def _of(circuit: Network, reference: str) -> list[Element]:
    return [
        e for e in circuit.elements if e.name == reference or e.name.startswith(f"{reference}.")
    ]


def _terminals(solution: Solution, element: Element) -> tuple[Floats, Floats]:
    volts = np.stack([solution.volts[node] for node in element.nodes], axis=1)
    return volts, element.currents(volts)[0]


def _into(circuit: Network, solution: Solution, node: str) -> Floats:
    """Current that the elements draw from a node."""
    total = np.zeros_like(solution.volts[node])
    for element in circuit.elements:
        _, currents = _terminals(solution, element)
        for terminal, name in enumerate(element.nodes):
            if name == node:
                total = total + currents[:, terminal]
    return total


def _across(circuit: Network, solution: Solution, reference: str) -> tuple[Floats, Floats, Floats]:
    """Voltage across a part, current through it, and power in it, for every sample."""
    own = _of(circuit, reference)
    power = np.zeros(solution.residual.shape)
    for element in own:
        volts, currents = _terminals(solution, element)
        power = power + (volts * currents).sum(axis=1)
    if len(own) > 1:
        first, last = own[1].nodes[0], own[0].nodes[2]
        outside = own[1:2]
        through = _terminals(solution, outside[0])[1][:, 0]
        body = _terminals(solution, own[2])[1][:, 0]
        through = through + np.where(own[2].nodes[0] == first, body, -body)
    else:
        first, last = own[0].nodes[0], own[0].nodes[-1]
        through = solution.currents[reference]
    return solution.between(first, last), through, power


def _worst(circuit: Network, solution: Solution, reference: str) -> PartState:
    volts, amps, watts = _across(circuit, solution, reference)
    k = int(np.argmax(np.abs(volts)))
    return PartState(float(volts[k]), float(amps[k]), float(watts.max()))


def _ratings(stage: Stage, circuit: Network, solution: Solution, reference: str) -> list[Rating]:
    part = stage.file.parts[reference]
    volts, amps, watts = _across(circuit, solution, reference)
    if isinstance(part, Diode):
        return [
            _rating(reference, "reverse voltage", "V", -volts, part.reverse_voltage_max_V),
            _rating(reference, "average forward current", "A", amps, part.average_current_max_A),
        ]
    if isinstance(part, PMosfet):
        gate = solution.between(*_of(circuit, reference)[0].nodes[1:3])
        return [
            _rating(reference, "drain-source voltage", "V", np.abs(volts), part.drain_source_max_V),
            _rating(reference, "gate-source voltage", "V", np.abs(gate), part.gate_source_max_V),
            _rating(reference, "drain current", "A", np.abs(amps), part.drain_current_max_A),
        ]
    assert isinstance(part, ResistorPart)
    return [_rating(reference, "power", "W", watts, part.power_max_W)]


def _rating(part: str, rating: str, unit: str, values: Floats, limit: float) -> Rating:
    value = max(float(values.max()), 0.0)
    return Rating(part, rating, unit, value, limit, limit - value, value <= limit * (1 + SOLVED))


def _junction_rating(stage: Stage, junction: Floats) -> Rating:
    limit = stage.main_part.junction_max_C
    return _rating(stage.main, "junction temperature", "C", junction, limit)


def _notes(name: str, ratings: list[Rating], guarded_V: float) -> list[str]:
    notes = [
        f"{r.part}: {r.rating} would be {r.value:.4g} {r.unit}, above its rating of "
        f"{r.limit:.4g} {r.unit}"
        for r in ratings
        if not r.holds
    ]
    if name == "reversed-source":
        if guarded_V > -0.5:
            notes.append(f"the guarded side sees {guarded_V:.3g} V at most: it is protected")
        else:
            notes.append(f"the guarded side is pulled to {guarded_V:.3g} V: it is not protected")
    return notes
