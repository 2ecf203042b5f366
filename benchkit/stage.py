"""A stage as the calculations see it: its topology, the laws of its parts, and their spread."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.network import Element
from benchkit.errors import InputError
from benchkit.files.parts import Diode, Part, PMosfet, Resistor
from benchkit.files.stage import StageFile
from benchkit.parts.diode import DiodeLaw, DiodeModel
from benchkit.parts.diode_points import diode_model
from benchkit.parts.mosfet import ChannelLaw, MosfetModel, mosfet_model
from benchkit.parts.tolerance import between, scores
from benchkit.topologies import TOPOLOGIES, Topology
from benchkit.topologies.base import Law, MosfetLaws

Floats = NDArray[np.float64]
AnyLaw = TypeVar("AnyLaw", DiodeLaw, ChannelLaw)


@dataclass(frozen=True)
class Sample:
    """The laws of ``size`` boards, each law's parameters arrays of shape (size,)."""

    size: int
    laws: Mapping[str, Law]
    case_to_ambient_K_per_W: Floats

    def repeated(self, times: int) -> Sample:
        """Each board ``times`` times in a row, for a batch of boards by conditions."""
        return Sample(
            self.size * times,
            {name: _repeat(law, times) for name, law in self.laws.items()},
            np.repeat(self.case_to_ambient_K_per_W, times),
        )


@dataclass(frozen=True)
class Stage:
    """Made by ``build_stage``."""

    file: StageFile
    topology: Topology
    names: Mapping[str, str]
    """The reference that fills each role of the topology."""
    models: Mapping[str, DiodeModel | MosfetModel | Resistor]
    notes: tuple[str, ...]

    @property
    def main(self) -> str:
        """Reference of the part that carries the working current."""
        return self.names[self.topology.main]

    @property
    def main_part(self) -> Diode | PMosfet:
        """Its table in the file."""
        part = self.file.parts[self.main]
        assert not isinstance(part, Resistor)
        return part

    def elements(self, sample: Sample, junction_C: Floats | float) -> list[Element]:
        """The stage's network elements for a sample, its main part at ``junction_C``."""
        return self.topology.elements(self.names, sample.laws, junction_C)

    def typical(self) -> Sample:
        """One board of typical parts."""
        return self._sample({}, 1)

    def draw(self, size: int, seed: int) -> Sample:
        """``size`` boards drawn from the parts' tolerances, reproducible from ``seed``."""
        generator = np.random.default_rng(seed)
        keys = [f"{name}.{what}" for name in self.models for what in ("a", "b", "c")]
        return self._sample({key: scores(generator, size) for key in [*keys, "heat"]}, size)

    def corner(self, direction: int) -> Sample:
        """One board whose every part is at the sheet's limit: +1 drops the most, -1 the least."""
        value = np.array([3.0 * direction])
        keys = [f"{name}.{what}" for name in self.models for what in ("a", "b", "c")]
        return self._sample(dict.fromkeys([*keys, "heat"], value), 1)

    def _sample(self, drawn: Mapping[str, Floats], size: int) -> Sample:
        none = np.zeros(size)
        laws: dict[str, Law] = {}
        for name, model in self.models.items():
            a, b, c = (drawn.get(f"{name}.{what}", none) for what in ("a", "b", "c"))
            if isinstance(model, DiodeModel):
                laws[name] = model.sample(a, b)
            elif isinstance(model, MosfetModel):
                laws[name] = MosfetLaws(model.sample(a, b), model.body_law(c))
            else:
                spread = model.tolerance_percent / 100
                laws[name] = model.value_ohm * between(a, 1 - spread, 1.0, 1 + spread)
        heat = self.file.heat
        typ, most = heat.case_to_ambient_K_per_W, heat.case_to_ambient_max_K_per_W
        resistance = between(drawn.get("heat", none), typ * typ / most, typ, most)
        return Sample(size, laws, resistance)


def build_stage(file: StageFile, name: str) -> Stage:
    """Fit every part and fill the topology's roles.

    Raises InputError naming file ``name`` when parts are missing, surplus or contradictory.
    """
    topology = TOPOLOGIES[file.stage.topology]
    models: dict[str, DiodeModel | MosfetModel | Resistor] = {}
    mistakes = []
    for reference, part in file.parts.items():
        try:
            models[reference] = _model(reference, part)
        except InputError as error:
            mistakes.append(f"{name}: {error}")
    names: dict[str, str] = {}
    left = dict(file.parts)
    for role, kind in topology.kinds.items():
        found = [reference for reference, part in left.items() if part.kind == kind]
        if found:
            names[role] = found[0]
            del left[found[0]]
        elif role not in topology.optional:
            mistakes.append(f"{name}: topology {topology.name} needs a part of kind {kind!r}")
    mistakes += [
        f"{name}: parts.{reference} is a {part.kind} that topology {topology.name} has no place "
        f"for; its parts are {', '.join(topology.kinds.values())}, one of each"
        for reference, part in left.items()
    ]
    if mistakes:
        raise InputError("\n".join(mistakes))
    notes = tuple(
        note
        for model in models.values()
        if isinstance(model, DiodeModel | MosfetModel)
        for note in model.notes
    )
    return Stage(file, topology, names, models, notes)


def _model(reference: str, part: Part) -> DiodeModel | MosfetModel | Resistor:
    if isinstance(part, Diode):
        return diode_model(reference, part)
    if isinstance(part, PMosfet):
        return mosfet_model(reference, part)
    return part


def _repeat(law: Law, times: int) -> Law:
    """Each board of a law ``times`` times in a row."""
    if isinstance(law, MosfetLaws):
        return MosfetLaws(_each(law.channel, times), _each(law.body, times))
    if isinstance(law, DiodeLaw):
        return _each(law, times)
    return np.repeat(law, times) if isinstance(law, np.ndarray) else law


def _each(law: AnyLaw, times: int) -> AnyLaw:
    arrays: dict[str, Any] = {
        key: np.repeat(value, times)
        for key, value in vars(law).items()
        if isinstance(value, np.ndarray)
    }
    return dataclasses.replace(law, **arrays)
