"""What a topology file gives: which parts it has, and between which nodes each is wired.

Every topology uses the same port names: ``exposed+``, ``exposed-``, ``guarded+`` and ``guarded-``.
A P-channel topology breaks the plus lead, so its two minus terminals are one node, the reference;
its N-channel mirror breaks the minus lead, and there the two plus terminals are the reference.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from benchkit.circuit.network import GROUND

EXPOSED, GUARDED = "exposed+", "guarded+"
PLUS, MINUS = (EXPOSED, GUARDED), ("exposed-", "guarded-")
INNER = "inner"
"""The broken lead behind fuse and lead resistance, where the device begins."""

TERMINALS: Mapping[str, tuple[str, ...]] = {
    "diode": ("anode", "cathode"),
    "tvs": ("anode", "cathode"),
    "zener": ("anode", "cathode"),
    "p-mosfet": ("drain", "gate", "source"),
    "n-mosfet": ("drain", "gate", "source"),
    "npn": ("collector", "base", "emitter"),
    "pnp": ("collector", "base", "emitter"),
    "resistor": ("first", "second"),
    "lead": ("first", "second"),
    "fuse": ("first", "second"),
}
"""The terminals of each kind of part, in the order in which its nodes are given."""

MIRROR = {"p-mosfet": "n-mosfet", "npn": "pnp"}
POLAR = {"diode", "tvs", "zener"}


@dataclass(frozen=True)
class Role:
    """One part of a topology: the kinds it can be and its nodes, in the order of TERMINALS.

    absent: what stands there where the part is not fitted, or ``required``.
    """

    kinds: tuple[str, ...]
    nodes: tuple[str, ...]
    absent: Literal["required", "short", "open"] = "required"


@dataclass(frozen=True)
class Topology:
    """One way to wire a stage.

    main: the role whose part carries the working current and gets warm, or is watched for
    warmth. guards: what usually stands on the guarded side. conducts: what the forward drop of a
    good board looks like; ``lead`` where the working current meets no semiconductor.
    """

    name: str
    roles: Mapping[str, Role]
    main: str
    guards: Literal["load", "supply"]
    conducts: Literal["junction", "channel", "lead"]
    reference: Literal["minus", "plus"] = "minus"


@dataclass(frozen=True)
class Ports:
    """The nodes of the four terminals; two of them may be one."""

    exposed_plus: str
    exposed_minus: str
    guarded_plus: str
    guarded_minus: str


@dataclass(frozen=True)
class Wiring:
    """Which part is between which nodes (by reference, in order), and where the ports are."""

    parts: Mapping[str, tuple[str, ...]]
    ports: Ports


def in_lead(fuse: Literal["required", "short"] = "short") -> dict[str, Role]:
    """Fuse and resistance in the plus lead, between the exposed terminal and the device."""
    return {
        "fuse": Role(("fuse",), ("exposed+", "fused"), fuse),
        "lead": Role(("lead",), ("fused", INNER), "short"),
    }


def mirrored(topology: Topology, name: str) -> Topology:
    """The same with every voltage and current turned round: N for P, minus lead for plus lead."""

    def role(of: Role) -> Role:
        nodes = tuple(node.replace("+", "-") for node in of.nodes)
        if of.kinds[0] in POLAR:
            nodes = nodes[::-1]
        return Role(tuple(MIRROR.get(kind, kind) for kind in of.kinds), nodes, of.absent)

    return Topology(
        name, {key: role(of) for key, of in topology.roles.items()}, topology.main,
        topology.guards, topology.conducts, "plus",
    )  # fmt: skip


def wire(topology: Topology, names: Mapping[str, str]) -> Wiring:
    """Place the parts that fill the roles; ``names`` gives the reference in each filled role."""
    same = [
        (role.nodes[0], role.nodes[-1])
        for key, role in topology.roles.items()
        if key not in names and role.absent == "short"
    ]
    straight = MINUS if topology.reference == "minus" else PLUS
    same += [(GROUND, node) for node in straight]
    parts = {names[key]: role.nodes for key, role in topology.roles.items() if key in names}
    return _merged(parts, same)


def wire_network(parts: Mapping[str, tuple[str, ...]], guards: Literal["load", "supply"]) -> Wiring:
    """Anyone's own circuit; a port terminal that no part is wired to goes straight through.

    The reference is the minus terminal of the port that is driven in normal use.
    """
    used = {node for nodes in parts.values() for node in nodes}
    same = [pair for pair in (PLUS, MINUS) if not (pair[0] in used and pair[1] in used)]
    return _merged(parts, [*same, (GROUND, MINUS[0] if guards == "load" else MINUS[1])])


def _merged(parts: Mapping[str, tuple[str, ...]], same: Iterable[tuple[str, str]]) -> Wiring:
    """Give nodes that are one the same name: reference, else port, else gate, else any."""
    groups: list[set[str]] = []
    for pair in same:
        joined = set(pair)
        for group in [g for g in groups if g & joined]:
            groups.remove(group)
            joined |= group
        groups.append(joined)
    order = [GROUND, *PLUS, *MINUS, "gate"]
    names = {node: min(g, key=lambda n: _rank(n, order)) for g in groups for node in g}
    ports = (names.get(node, node) for node in (PLUS[0], MINUS[0], PLUS[1], MINUS[1]))
    return Wiring(
        {ref: tuple(names.get(node, node) for node in nodes) for ref, nodes in parts.items()},
        Ports(*ports),
    )


def _rank(node: str, order: Sequence[str]) -> tuple[int, str]:
    return (order.index(node) if node in order else len(order), node)
