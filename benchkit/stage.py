"""A stage as the calculations see it: its wiring, the laws of its parts, and their spread."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from benchkit.batch import repeated
from benchkit.circuit.network import Element
from benchkit.errors import InputError
from benchkit.files.parts import Diode, NMosfet, Part, PMosfet, Tvs
from benchkit.files.stage import StageFile
from benchkit.parts.fitted import AnyModel, part_model
from benchkit.parts.tolerance import SIGMAS_TO_LIMIT, between, scores
from benchkit.placing import Law, placed
from benchkit.roles import fill_roles, with_article
from benchkit.topologies import TOPOLOGIES, Ports, Topology, Wiring, wire, wire_network
from benchkit.topologies.base import MINUS, PLUS, TERMINALS

Floats = NDArray[np.float64]
MainPart = Diode | Tvs | PMosfet | NMosfet

MUST_STAND: Mapping[str, tuple[str, ...]] = {
    "load": ("right-way", "reversed-source"),
    "supply": ("right-way", "reversed-battery-off", "reversed-battery-on", "back-feed", "open"),
}  # fmt: skip
"""What a stage has to stand for what it guards, unless its file says otherwise."""
CORNERS = (-SIGMAS_TO_LIMIT, SIGMAS_TO_LIMIT)
SCORES = ("a", "b", "c")
"""Every model is sampled from three independent scores, used or not."""


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
            {name: repeated(law, times) for name, law in self.laws.items()},
            np.repeat(self.case_to_ambient_K_per_W, times),
        )


@dataclass(frozen=True)
class Stage:
    """Made by ``build_stage``."""

    file: StageFile
    topology: Topology | None
    """None for a circuit of one's own."""
    names: Mapping[str, str]
    """The reference that fills each role of the topology."""
    main: str
    """Reference of the part that carries the working current, or is watched for warmth."""
    wiring: Wiring
    models: Mapping[str, AnyModel]
    notes: tuple[str, ...]

    @property
    def ports(self) -> Ports:
        """The nodes of its terminals."""
        return self.wiring.ports

    @property
    def guards(self) -> Literal["load", "supply"]:
        """What is on the guarded side."""
        usual = self.topology.guards if self.topology is not None else "load"
        return self.file.stage.guards or usual

    @property
    def must_stand(self) -> tuple[str, ...]:
        """The scenarios in which every rating must hold."""
        given = self.file.stage.must_stand
        return MUST_STAND[self.guards] if given is None else tuple(given)

    @property
    def conducts(self) -> Literal["junction", "channel", "lead"]:
        """What the forward drop of a good board looks like."""
        if self.topology is not None:
            return self.topology.conducts
        return "channel" if isinstance(self.main_part, PMosfet | NMosfet) else "junction"

    @property
    def main_part(self) -> MainPart:
        """Its table in the file."""
        part = self.file.parts[self.main]
        assert isinstance(part, MainPart)
        return part

    @property
    def junction_to_case_K_per_W(self) -> float:
        """Of the main part."""
        value = self.main_part.junction_to_case_K_per_W
        assert value is not None
        return value

    @property
    def gate_nodes(self) -> tuple[str, str] | None:
        """Gate and source of the main part, if it has a gate."""
        if not isinstance(self.main_part, PMosfet | NMosfet):
            return None
        _, gate, source = self.wiring.parts[self.main]
        return gate, source

    def elements(
        self, sample: Sample, junction_C: Floats | float, others_C: Floats | float | None = None
    ) -> list[Element]:
        """The network elements of a sample: main part at ``junction_C``, others at ``others_C``.

        The others are as warm as the main part where they are not given.
        """
        rest = junction_C if others_C is None else others_C
        return [
            element
            for reference, nodes in self.wiring.parts.items()
            for element in placed(
                reference, self.file.parts[reference].kind, nodes, sample.laws[reference],
                junction_C if reference == self.main else rest,
            )
        ]  # fmt: skip

    def typical(self) -> Sample:
        """One board of typical parts."""
        return self._sample({}, 1)

    def draw(self, size: int, seed: int, *, corners: bool = False) -> Sample:
        """``size`` boards drawn from the parts' tolerances, reproducible from ``seed``.

        corners: the last two of them are those whose parts are all at the sheet's limit; ValueError
        for fewer than two.
        """
        if corners and size < len(CORNERS):
            raise ValueError(f"{size} boards cannot hold both corners")
        generator = np.random.default_rng(seed)
        drawn = {key: scores(generator, size) for key in self._keys()}
        if corners:
            for values in drawn.values():
                values[-len(CORNERS) :] = CORNERS
        return self._sample(drawn, size)

    def corner(self, direction: int) -> Sample:
        """One board whose every part is at the sheet's limit: +1 drops the most, -1 the least."""
        return self._sample(dict.fromkeys(self._keys(), np.array([SIGMAS_TO_LIMIT * direction])), 1)

    def _keys(self) -> list[str]:
        return [f"{name}.{what}" for name in self.models for what in SCORES] + ["heat"]

    def _sample(self, drawn: Mapping[str, Floats], size: int) -> Sample:
        none = np.zeros(size)
        laws: dict[str, Law] = {
            name: model.sample(*(drawn.get(f"{name}.{what}", none) for what in SCORES))
            for name, model in self.models.items()
        }
        heat = self.file.heat
        typ, most = heat.case_to_ambient_K_per_W, heat.case_to_ambient_max_K_per_W
        resistance = between(drawn.get("heat", none), typ * typ / most, typ, most)
        return Sample(size, laws, resistance)


def build_stage(file: StageFile, name: str) -> Stage:
    """Fit every part and wire it.

    Raises InputError naming file ``name`` when parts are missing, surplus or contradictory.
    """
    models: dict[str, AnyModel] = {}
    mistakes: list[str] = []
    for reference, part in file.parts.items():
        try:
            models[reference] = part_model(reference, part)
        except InputError as error:
            mistakes.append(str(error))
    topology = TOPOLOGIES.get(file.stage.topology)
    names: dict[str, str] = {}
    if topology is None:
        main, wiring = str(file.stage.main), _network(file, mistakes)
    else:
        names = fill_roles(topology, file.parts, mistakes)
        main = names.get(topology.main, "")
        wiring = wire(topology, names)
    if main in file.parts:
        _check_main(main, file.parts[main], mistakes)
    if mistakes:
        raise InputError("\n".join(f"{name}: {mistake}" for mistake in mistakes))
    notes = tuple(note for model in models.values() for note in model.notes)
    return Stage(file, topology, names, main, wiring, models, notes)


def _check_main(main: str, part: Part, mistakes: list[str]) -> None:
    if not isinstance(part, MainPart):
        mistakes.append(
            f"stage.main is {main!r}, {with_article(part.kind)}: the part whose case is measured "
            "must be a diode, a tvs or a MOSFET"
        )
    elif part.junction_to_case_K_per_W is None:
        mistakes.append(
            f"parts.{main}.junction_to_case_K_per_W is missing: it is the part whose case is "
            "measured"
        )


def _network(file: StageFile, mistakes: list[str]) -> Wiring:
    """The wiring of a circuit of one's own, checked."""
    wired: dict[str, tuple[str, ...]] = {}
    named: set[str] = set()
    before = len(mistakes)
    for number, entry in enumerate(file.network, start=1):
        key = f"network[{number}]"
        part = file.parts.get(entry.part)
        if part is None:
            mistakes.append(f"{key}.part is {entry.part!r}: it must be one of {_list(file.parts)}")
            continue
        if entry.part in named:
            mistakes.append(
                f"{key}.part is {entry.part!r}, which is wired already: each part has one entry"
            )
            continue
        named.add(entry.part)
        terminals, nodes = TERMINALS[part.kind], entry.nodes()
        if set(nodes) != set(terminals):
            mistakes.append(
                f"{key} wires {_list(nodes) or 'nothing'} of {entry.part}, "
                f"{with_article(part.kind)}: it must wire {_list(terminals)}"
            )
            continue
        odd = [node for node in nodes.values() if node == "0" or "." in node or not node.strip()]
        if odd:
            mistakes.append(
                f"{key} wires {entry.part} to {odd[0]!r}: a node is exposed+, exposed-, guarded+, "
                "guarded- or a name of your own without a dot, and not 0"
            )
            continue
        wired[entry.part] = tuple(nodes[terminal] for terminal in terminals)
    mistakes += [
        f"parts.{reference} is wired to nothing: give it an entry in [[network]]"
        for reference in file.parts
        if reference not in named
    ]
    if len(mistakes) == before:
        mistakes += _loose(wired)
    return wire_network(wired, file.stage.guards or "load")


def _loose(wired: Mapping[str, tuple[str, ...]]) -> list[str]:
    """Nodes of one's own that join nothing: mostly the name of another node, misspelt."""
    ends = Counter(node for nodes in wired.values() for node in nodes)
    return [
        f"network wires {reference} to {node!r} and nothing else is wired there: a node that is "
        f"no port joins two terminals; the nodes are {_list(sorted({*ends, *PLUS, *MINUS}))}"
        for reference, nodes in wired.items()
        for node in nodes
        if ends[node] == 1 and node not in (*PLUS, *MINUS)
    ]


def _list(names: object) -> str:
    return ", ".join(names)  # type: ignore[arg-type]


__all__ = ["Law", "MainPart", "Sample", "Stage", "build_stage"]
