"""A network as a deck for SPICE, with the same laws.

Junctions and bipolar transistors are SPICE's own models, worked out for their temperature and
given as they would be at 25 degrees Celsius, the deck's only temperature. Channels, breakdown,
leakage, fuses and limited supplies are behavioural sources (``B``) of the functions in LAWS,
because SPICE has no built-in twin of them. Only elements, ``.model``, ``.func``, ``.options``,
``.temp``, ``.nodeset`` and ``.op`` are used.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence

import numpy as np

from benchkit.circuit import (
    GROUND,
    Bipolar,
    Channel,
    CurrentLoad,
    Emf,
    FuseLink,
    Junction,
    LimitedSource,
    Network,
    Resistor,
)
from benchkit.circuit.elements import CORNER_A, CORNER_SHARE
from benchkit.circuit.network import Element
from benchkit.parts.diode import LeakageAt, thermal_voltage
from benchkit.parts.knee import KneeAt
from benchkit.parts.mosfet import SLOPE_FACTOR

DECK_C = 25.0
OPTIONS = (
    f".temp {DECK_C:g}",
    f".options tnom={DECK_C:g} reltol=1e-6 abstol=1e-12 vntol=1e-9 gmin=1e-13 itl1=500",
)
MOST_EXPONENT = 200
"""Where a knee's exponential is cut: an iteration goes there, an operating point does not."""
NOTHING = 1e-15
"""Of a knee's current scale: too little to write down."""

LAWS: Mapping[str, tuple[str, ...]] = {
    "above": (
        "* x above zero; max() has no slope at a tie, and ngspice stumbles there",
        ".func above(x) {0.5*((x)+abs(x))}",
    ),
    "lnexp": ("* ln(1+exp(x)), without overflow", ".func lnexp(x) {above(x)+ln(1+exp(-abs(x)))}"),
    "square": (".func square(x) {(x)*(x)}",),
    "channel": (
        "* MOSFET channel (EKV) per 2 n b Vt^2: gate and drain above source, threshold, 2 Vt",
        ".func channel(gs,ds,th,vt2) {"
        f"square(lnexp((gs-th)/({SLOPE_FACTOR:g}*vt2)))"
        f"-square(lnexp((gs-th)/({SLOPE_FACTOR:g}*vt2)-ds/vt2))}}",
    ),
    "leakage": (
        "* leakage at a reverse voltage: height, its power of voltage, less what the model leaks",
        ".func leakage(v,unit,power,less,least,scale) "
        "{max(unit*pow(1+above(v),power)-less,least)*(1-exp(-above(v)/scale))}",
    ),
    "knee": (
        "* breakdown: an exponential of the voltage, in units of its own current scale",
        f".func knee(v,at,scale,rest) {{above(exp(min((v-at)/scale,{MOST_EXPONENT}))-rest)}}",
    ),
    "supply": (
        "* a one-quadrant supply: the current asked for, between nothing and its limit",
        ".func supply(asked,limit,corner) "
        "{corner*(lnexp(asked/corner)-lnexp((asked-limit)/corner))}",
    ),
}
"""Every law that SPICE lacks, and what to say about it; later ones use earlier ones."""
NEEDS: Mapping[str, tuple[str, ...]] = {
    "channel": ("above", "lnexp", "square"), "leakage": ("above",), "knee": ("above",),
    "supply": ("above", "lnexp"),
}  # fmt: skip

LETTERS: Mapping[type, str] = {
    Resistor: "R", Emf: "V", CurrentLoad: "I", LimitedSource: "B", Junction: "D", FuseLink: "B",
    Channel: "B", Bipolar: "Q",
}  # fmt: skip
INNER = ("emf", "in", "knee")
"""Nodes that a deck has more than its network, behind the name of their element."""


def deck(
    circuit: Network,
    volts: Mapping[str, object],
    title: str,
    comments: Sequence[str],
    headings: Mapping[str, str] | None = None,
) -> str:
    """The deck of a network of one entry (batch 1), ending in the operating point that is solved.

    volts: its node voltages, from which SPICE starts, since it may have several operating points.
    headings: a comment above the first element of each reference (what is before the first dot
    of an element's name). TypeError for an element of another kind than those of
    ``benchkit.circuit``.
    """
    nodes = _node_names(circuit)
    said = [
        f"* node {name} is {_ascii(node)}"
        for node, name in nodes.items()
        if node not in (name, GROUND)
    ]
    lines: list[str] = []
    written: set[str] = set()
    headings, headed = headings or {}, ""
    for element in circuit.elements:
        reference = element.name.split(".")[0]
        if reference != headed and reference in headings:
            lines.append(f"* {_ascii(headings[reference])}")
        headed = reference
        name = _own_name(element, written, set(nodes.values()))
        lines += _lines(name, element, [nodes[node] for node in element.nodes])
    for node, value in circuit.held.items():
        lines.append(f"Vheld_{nodes[node]} {nodes[node]} 0 {_number(value)}")
    return "\n".join([
        f"* {_ascii(title)}", *(f"* {_ascii(comment)}" for comment in comments), *said,
        *_used_laws(lines), *lines,
        ".nodeset " + " ".join(
            f"v({name})={_number(volts[node])}" for node, name in nodes.items() if node != GROUND
        ),
        *OPTIONS, ".op", ".end", "",
    ])  # fmt: skip


def _used_laws(lines: Sequence[str]) -> Iterator[str]:
    text = "\n".join(lines)
    used = {law for law in LAWS if f"{law}(" in text}
    used |= {need for law in used for need in NEEDS.get(law, ())}
    for law, written in LAWS.items():
        if law in used:
            yield from written


def _node_names(circuit: Network) -> dict[str, str]:
    """A name that every SPICE reads for each node."""
    names = {GROUND: "0"}
    taken = {"gnd"}  # another name of node 0 to most of them
    for node in circuit.node_names():
        plain = _plain(node.replace("+", "_plus").replace("-", "_minus")).lower()
        names[node] = _unique(plain if plain[:1].isalpha() else f"n{plain}", taken)
    return names


def _own_name(element: Element, taken: set[str], nodes: set[str]) -> str:
    """Its reference, behind the letter by which SPICE knows its kind, and nobody else's."""
    plain = _plain(element.name)
    letter = LETTERS.get(type(element), "")
    bare = "." not in element.name and plain[:1].upper() == letter and letter not in "BV"
    name = plain if bare else letter + plain
    while any(f"{name}_{inner}".lower() in nodes for inner in INNER):
        name += "_"
    return _unique(name, taken)


def _unique(name: str, taken: set[str]) -> str:
    """A name that is not taken yet, capitals or not; it is from now on."""
    while name.lower() in taken:
        name += "_"
    taken.add(name.lower())
    return name


def _plain(text: str) -> str:
    return re.sub(r"[^A-Za-z0-9_]", "_", text)


def _ascii(text: str) -> str:
    plain = text.replace("°", "deg ").replace("µ", "u").replace("Ω", "ohm")
    return " ".join(plain.split()).encode("ascii", "replace").decode("ascii")


def _value(value: object) -> float:
    return float(np.ravel(np.asarray(value, dtype=float))[0])


def _number(value: object) -> str:
    return f"{_value(value):.6g}"


def _lines(name: str, element: Element, nodes: list[str]) -> Iterator[str]:
    if isinstance(element, Resistor):
        yield f"{name} {nodes[0]} {nodes[1]} {_number(element.ohms)}"
    elif isinstance(element, Emf):
        yield f"{name} {name.lower()}_emf {nodes[1]} {_number(element.emf_V)}"
        yield f"R{name[1:]} {nodes[0]} {name.lower()}_emf {_number(element.ohms)}"
    elif isinstance(element, CurrentLoad):
        yield f"{name} {nodes[0]} {nodes[1]} {_number(element.amps)}"
    elif isinstance(element, LimitedSource):
        limit = _value(element.limit_A)
        asked = f"({_number(element.emf_V)}-{_between(*nodes)})/{_number(element.ohms)}"
        corner = _number(CORNER_SHARE * limit + CORNER_A)
        yield f"{name} {nodes[1]} {nodes[0]} I=supply({asked},{_number(limit)},{corner})"
    elif isinstance(element, Junction):
        yield from _junction(name, element, nodes)
    elif isinstance(element, FuseLink):
        law, amps = element.law, f"i(V{name[1:]})"
        warm = f"min(pow({amps}/{_number(law.fusing_A)},2),1)"
        yield f"V{name[1:]} {nodes[0]} {name.lower()}_in 0"
        yield (
            f"{name} {name.lower()}_in {nodes[1]} "
            f"V={amps}*{_number(law.cold_ohm)}*(1+{_number(law.hot_ratio)}*{warm})"
        )
    elif isinstance(element, Channel):
        drain, gate, source = nodes
        gate_V, drain_V, ends = (
            (_between(gate, source), _between(drain, source), f"{drain} {source}")
            if element.polarity > 0
            else (_between(source, gate), _between(source, drain), f"{source} {drain}")
        )
        channel = element.law
        inside = f"{gate_V},{drain_V},{_number(channel.threshold_V)},{_number(channel.twice_vt_V)}"
        yield f"{name} {ends} I={_number(channel.unit_A)}*channel({inside})"
    elif isinstance(element, Bipolar):
        yield from _bipolar(name, element, nodes)
    else:
        raise TypeError(f"{element.name} has no twin in a deck")


def _between(plus: str, minus: str) -> str:
    """The voltage between two nodes, in an expression."""
    if minus == "0":
        return f"v({plus})" if plus != "0" else "0"
    return f"v({plus},{minus})" if plus != "0" else f"(-v({minus}))"


def _junction(name: str, element: Junction, nodes: list[str]) -> Iterator[str]:
    anode, cathode = nodes
    law, emission = element.law, _emission(element.law.scale_V)
    model = f"IS={_number(law.saturation_A)} N={emission} RS={_number(law.series_ohm)}"
    yield f"{name} {anode} {cathode} {name}_model"
    yield f".model {name}_model D({model})"
    if law.leakage is not None:
        yield _leakage(name, law.leakage, nodes)
    if law.knee is not None:
        yield from _knee(name, law.knee, nodes)


def _emission(scale_V: object) -> str:
    """The emission coefficient that gives a junction its width at the deck's temperature."""
    return _number(_value(scale_V) / float(thermal_voltage(DECK_C)))


def _leakage(name: str, law: LeakageAt, nodes: list[str]) -> str:
    values = (law.unit_A, law.power, law.replaced_A, law.least_A, law.scale_V)
    listed = ",".join(map(_number, values))
    across = _between(nodes[1], nodes[0])
    return f"B{name}_leakage {nodes[1]} {nodes[0]} I=leakage({across},{listed})"


def _knee(name: str, law: KneeAt, nodes: list[str]) -> Iterator[str]:
    """Its resistance, and behind it the bare exponential, from cathode to anode."""
    anode, cathode = nodes
    inner, scale, rest = f"{name.lower()}_knee", _value(law.scale_V), _value(law.rest)
    # With w = rest + I/unit in omega's equation, what is left is an exponential of the inner node.
    at = scale * (rest - _value(law.offset))
    unit = scale / _value(law.series_ohm)
    listed = ",".join(map(_number, (at, scale, rest if rest > NOTHING else 0.0)))
    yield f"R{name}_knee {cathode} {inner} {_number(law.series_ohm)}"
    across = _between(inner, anode)
    yield f"B{name}_knee {inner} {anode} I={_number(unit)}*knee({across},{listed})"


def _bipolar(name: str, element: Bipolar, nodes: list[str]) -> Iterator[str]:
    collector, base, emitter = nodes
    law, npn = element.law, element.polarity > 0
    emission = _emission(law.scale_V)
    forward, reverse = 1 / np.asarray(law.forward_share), 1 / np.asarray(law.reverse_share)
    yield f"{name} {collector} {base} {emitter} {name}_model"
    yield (
        f".model {name}_model {'NPN' if npn else 'PNP'}(IS={_number(law.saturation_A)} "
        f"BF={_number(forward)} BR={_number(reverse)} NF={emission} NR={emission})"
    )
    if _value(law.leakage_A) > 0:
        ends = (base, collector) if npn else (collector, base)
        scaled = f"{_between(*ends)}/{_number(law.scale_V)}"
        yield f"B{name}_leakage {ends[0]} {ends[1]} I={_number(law.leakage_A)}*tanh({scaled})"
    yield from _knee(name, law.breakdown, [base, emitter] if npn else [emitter, base])
