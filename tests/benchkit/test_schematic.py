"""The schematic: electrically the network that is solved, legible, and the same every time."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterator
from itertools import combinations, pairwise
from typing import Any
from xml.etree import ElementTree

import pytest

from benchkit.reports.schematic import Sketch, schematic_svg, symbol
from benchkit.reports.schematic_layouts import LAYOUTS, lay_out
from benchkit.reports.schematic_sheet import Layout, Point, on_segment
from benchkit.topologies import TOPOLOGIES, wire
from benchkit.topologies.base import POLAR, TERMINALS, in_lead

SVG = "{http://www.w3.org/2000/svg}"
CASES = [(name, full) for name in LAYOUTS for full in (True, False)]
MIRRORS = [(name, name.replace("pmos", "nmos")) for name in LAYOUTS if name.startswith("pmos")]


def fitted(topology: str, full: bool, label: str = "47 kΩ <&> $^") -> dict[str, Sketch]:
    roles = {**in_lead(), **TOPOLOGIES[topology].roles}
    return {
        key: Sketch(f"X{i}", role.kinds[0], label)
        for i, (key, role) in enumerate(roles.items(), 1)
        if full or role.absent == "required"
    }


def texts(svg: str) -> list[str]:
    return [element.text or "" for element in ElementTree.fromstring(svg).iter(f"{SVG}text")]


@pytest.mark.parametrize(("topology", "full"), CASES)
def test_every_reference_and_label_stands_as_text(topology: str, full: bool) -> None:
    parts = fitted(topology, full)
    svg = schematic_svg(topology, parts)
    assert svg.startswith("<svg ")
    said = texts(svg)
    assert [said.count(part.reference) for part in parts.values()] == [1] * len(parts)
    assert sum("47 kΩ <&> $^" in line for line in said) == len(parts)
    for port in ("exposed +", "exposed −", "guarded +", "guarded −"):
        assert said.count(port) == 1
    root = ElementTree.fromstring(svg)
    aloud = root.attrib["aria-label"]
    assert all(re.search(rf"\b{part.reference}\b", aloud) for part in parts.values())
    assert topology in aloud
    assert "font-family" not in svg


def test_an_empty_label_leaves_no_empty_line() -> None:
    said = texts(schematic_svg("series-diode", {"diode": Sketch("D1", "diode")}))
    assert "" not in said
    assert "D1" in said


def test_what_a_symbol_alone_would_not_tell_is_said() -> None:
    svg = schematic_svg("clamp", {"clamp": Sketch("D1", "tvs"), "lead": Sketch("W1", "lead", "9")})
    assert {"TVS", "lead 9"} <= set(texts(svg))
    assert svg.count("stroke-dasharray") == 1


@pytest.mark.parametrize(("topology", "full"), CASES)
def test_same_input_same_bytes(topology: str, full: bool) -> None:
    first = schematic_svg(topology, fitted(topology, full))
    schematic_svg("clamp", fitted("clamp", True))
    backwards = dict(reversed(fitted(topology, full).items()))
    assert schematic_svg(topology, backwards) == first
    assert " id=" not in first


def nodes(layout: Layout, points: list[Point]) -> dict[Point, int]:
    """Which drawn points are one node: joined by wires, where an end or terminal lies on one."""
    node = {point: i for i, point in enumerate(points)}
    for _ in points:
        for run in layout.wires:
            on = [p for p in points if any(on_segment(p, a, b) for a, b in pairwise(run))]
            for p in on:
                node[p] = min(node[q] for q in on)
    return node


@pytest.mark.parametrize(("topology", "full"), CASES)
def test_the_picture_is_the_network_that_is_solved(topology: str, full: bool) -> None:
    wired = TOPOLOGIES[topology]
    parts = {key: s for key, s in fitted(topology, full).items() if key in wired.roles}
    layout = lay_out(topology, parts)
    points = sorted(
        {end for run in layout.wires for end in run}
        | {end for placed in layout.parts for end in placed.terminals}
        | set(layout.ports.values())
    )
    drawn = nodes(layout, points)
    asked = wire(wired, {key: key for key in parts})
    pairs = [
        (drawn[at], asked.parts[placed.role][i])
        for placed in layout.parts
        for i, at in enumerate(placed.terminals)
    ]
    ports = asked.ports
    named = {
        "exposed+": ports.exposed_plus, "exposed-": ports.exposed_minus,
        "guarded+": ports.guarded_plus, "guarded-": ports.guarded_minus,
    }  # fmt: skip
    pairs += [(drawn[at], named[name]) for name, at in layout.ports.items()]
    assert {placed.role for placed in layout.parts} == set(parts)
    assert len(set(pairs)) == len({a for a, _ in pairs}) == len({b for _, b in pairs})


@pytest.mark.parametrize(("topology", "full"), CASES)
def test_dots_stand_where_three_meet_and_nowhere_else(topology: str, full: bool) -> None:
    layout = lay_out(topology, fitted(topology, full))
    dots = layout.dots()
    pieces = [piece for run in layout.wires for piece in pairwise(run)]
    pieces += [
        piece
        for placed in layout.parts
        if len(placed.terminals) == 2
        for piece in pairwise(placed.terminals)
    ]
    for (a, b), (c, d) in combinations(pieces, 2):
        (upright, level) = ((a, b), (c, d)) if a[0] == b[0] else ((c, d), (a, b))
        cross = (upright[0][0], level[0][1])
        if level[0][1] != level[1][1] or upright[0][0] != upright[1][0]:
            continue
        if on_segment(cross, *upright) and on_segment(cross, *level):
            assert cross in dots or (cross in (a, b) and cross in (c, d)), cross
    root = ElementTree.fromstring(schematic_svg(topology, fitted(topology, full)))
    assert len(root.findall(f"{SVG}circle")) == len(dots) + len(layout.ports)


def symbols(topology: str) -> Iterator[tuple[str, dict[str, Point], Any]]:
    import schemdraw

    parts = fitted(topology, True)
    drawing: Any = schemdraw.Drawing(canvas="svg", show=False)
    for placed in lay_out(topology, parts).parts:
        kind = parts[placed.role].kind
        yield (
            kind,
            dict(zip(TERMINALS[kind], placed.terminals, strict=True)),
            drawing.add(symbol(kind, placed.terminals)),
        )


@pytest.mark.parametrize("topology", LAYOUTS)
def test_symbols_sit_on_their_terminals(topology: str) -> None:
    for _, terminals, element in symbols(topology):
        for i, (name, at) in enumerate(terminals.items()):
            anchor = name if name in element.absanchors else ("start", "end")[i]
            assert tuple(element.absanchors[anchor]) == pytest.approx(at, abs=0.002), name


@pytest.mark.parametrize("topology", LAYOUTS)
def test_every_triangle_points_to_the_cathode(topology: str) -> None:
    """A MOSFET's body diode has its cathode at the drain of an N, at the source of a P."""
    blocking = {"n-mosfet": ("source", "drain"), "p-mosfet": ("drain", "source")}
    for kind, terminals, element in symbols(topology):
        if kind not in (*blocking, *POLAR):
            continue
        anode, cathode = (terminals[end] for end in blocking.get(kind, ("anode", "cathode")))
        outlines = [
            getattr(segment.xform(element.transform), "verts", []) for segment in element.segments
        ]
        [triangle] = [corners for corners in outlines if len(corners) == 3]
        low, middle, high = sorted(
            sum((c - a) * at for a, c, at in zip(anode, cathode, corner, strict=True))
            for corner in triangle
        )
        assert low == pytest.approx(middle)
        assert high > middle + 0.1


def boxes(svg: str) -> list[tuple[str, float, float, float, float]]:
    """Every text with its box, at 0.55 of the type size a character, from memory."""
    found = []
    for element in ElementTree.fromstring(svg).iter(f"{SVG}text"):
        size, text = float(element.attrib["font-size"]), element.text or ""
        x, y = float(element.attrib["x"]), float(element.attrib["y"])
        wide = 0.55 * size * len(text)
        left = x - wide * {"start": 0.0, "middle": 0.5, "end": 1.0}[element.attrib["text-anchor"]]
        found.append((text, left, y - 0.72 * size, left + wide, y))
    return found


@pytest.mark.parametrize(("topology", "full"), CASES)
@pytest.mark.parametrize("label", ["", "9 V", "small-signal 40 V 10 A"])
def test_no_text_is_cut_off_or_lies_on_another(topology: str, full: bool, label: str) -> None:
    svg = schematic_svg(topology, fitted(topology, full, label))
    view = [float(v) for v in ElementTree.fromstring(svg).attrib["viewBox"].split()]
    written = boxes(svg)
    for text, left, top, right, bottom in written:
        assert view[0] <= left <= right <= view[0] + view[2], text
        assert view[1] <= top <= bottom <= view[1] + view[3], text
    for one, two in combinations(written, 2):
        apart = one[3] < two[1] or two[3] < one[1] or one[4] < two[2] or two[4] < one[2]
        assert apart, (one[0], two[0])


@pytest.mark.parametrize(("topology", "full"), CASES)
@pytest.mark.parametrize("label", ["9 V", "small-signal 40 V 10 A"])
def test_no_wire_runs_through_text(topology: str, full: bool, label: str) -> None:
    parts = fitted(topology, full, label)
    written = boxes(schematic_svg(topology, parts))
    layout = lay_out(topology, parts)
    runs = [piece for run in layout.wires for piece in pairwise(run)]
    runs += [(p.terminals[0], p.terminals[-1]) for p in layout.parts if len(p.terminals) == 2]
    for a, b in runs:
        low = [36 * min(a[0], b[0]), 36 * min(-a[1], -b[1])]
        high = [36 * max(a[0], b[0]), 36 * max(-a[1], -b[1])]
        for text, left, top, right, bottom in written:
            apart = right < low[0] or high[0] < left or bottom < low[1] or high[1] < top
            assert apart, (text, a, b)


@pytest.mark.parametrize(("p", "n"), MIRRORS)
@pytest.mark.parametrize("full", [True, False])
def test_mirrors_hold_the_same_symbols(p: str, n: str, full: bool) -> None:
    counts = []
    for topology in (p, n):
        root = ElementTree.fromstring(schematic_svg(topology, fitted(topology, full)))
        counts.append(Counter(element.tag for element in root.iter()))
    assert counts[0] == counts[1]
    assert counts[0][f"{SVG}path"] > 10


@pytest.mark.parametrize("topology", ["network", "relay"])
def test_a_topology_without_a_picture_is_named(topology: str) -> None:
    with pytest.raises(ValueError, match=f"'{topology}'"):
        schematic_svg(topology, {})


@pytest.mark.parametrize("topology", LAYOUTS)
def test_a_missing_required_role_is_named(topology: str) -> None:
    for missing in fitted(topology, False):
        parts = fitted(topology, True)
        del parts[missing]
        with pytest.raises(ValueError, match=f"needs a part in role '{missing}'"):
            schematic_svg(topology, parts)


def test_a_role_or_kind_the_topology_does_not_have_is_named() -> None:
    parts = fitted("pmos-pass", False)
    with pytest.raises(ValueError, match="has no role 'sense'"):
        schematic_svg("pmos-pass", {**parts, "sense": Sketch("Q2", "npn")})
    with pytest.raises(ValueError, match="is a p-mosfet, not 'n-mosfet'"):
        schematic_svg("pmos-pass", {"pass": Sketch("Q1", "n-mosfet")})


def test_every_topology_has_a_picture() -> None:
    assert set(LAYOUTS) == set(TOPOLOGIES)
