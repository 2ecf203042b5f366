"""A stage's schematic as inline SVG, in the symbols a technician reads without a key.

Exposed terminals stand on the left, guarded ones on the right. Symbols follow IEC 60617 (a box for
a resistor, a box with a line through it for a fuse); a TVS is drawn as a breakdown diode, because
every one here has a polarity. The resistance of a lead is dashed: nobody can unsolder it.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from itertools import pairwise
from typing import Any
from xml.etree import ElementTree

from benchkit.reports.schematic_layouts import LAYOUTS, lay_out
from benchkit.reports.schematic_sheet import Layout, Placed, Point, Side, Sketch
from benchkit.topologies import TOPOLOGIES
from benchkit.topologies.base import POLAR, in_lead

__all__ = ["Sketch", "schematic_svg"]

INK, SOFT = "#20262B", "#56606A"
UNIT = 36.0
"""Pixels for one unit of the layout."""

SIZE, SMALL, LINE = 13.0, 11.0, 15.0
"""Type sizes and the distance between lines, pixels."""

MOSFET_SCALE = 1.8
BIPOLAR_SCALE = 0.75 / 0.55
DIODE_SCALE = 1.3
"""How far the library's own symbols are enlarged; the layout's lengths go with these."""

NAMES = {
    "diode": "diode", "tvs": "TVS", "zener": "Zener", "p-mosfet": "P-channel MOSFET",
    "n-mosfet": "N-channel MOSFET", "npn": "NPN transistor", "pnp": "PNP transistor",
    "resistor": "resistor", "lead": "resistance of the wiring", "fuse": "fuse",
}  # fmt: skip

PLACES = {
    "fuse": "in the {broken} lead",
    "lead": "in the {broken} lead",
    "clamp": "across the guarded terminals, cathode to plus",
    "diode": "in the plus lead, anode to the exposed side",
    "pass": "in the {broken} lead, drain to the exposed side, source to the guarded side",
    "gate": "from the gate to the {straight} lead",
    "zener": "between gate and source, {zener} at the source",
    "hold": "from the gate to the source",
    "sense": "with its emitter at the {straight} lead and its collector at the gate",
    "pull": "between that collector and the gate",
    "base": "from the exposed side of the {broken} lead to its base",
    "protect": "across base and emitter, {protect} at the base",
    "bleed": "from base to emitter",
}


def schematic_svg(topology: str, parts: Mapping[str, Sketch]) -> str:
    """Draw a stage as one ``<svg>`` element, to be set into a page as it is.

    topology: its name in a stage file. parts: every fitted role and what fills it; a role that is
    not fitted is drawn as the wire, or the gap, it is.

    The same input gives the same bytes. Text stays text and takes the typeface of the page, the
    element grows no wider than its natural size, and its words are in ``aria-label``.

    Raises ValueError where there is no picture of the topology (a network of one's own), where a
    required role has no part, and for a role or kind the topology does not have.
    """
    _check(topology, parts)
    layout = lay_out(topology, parts)
    left, top, width, height = _frame(layout, parts)
    root = ElementTree.Element(
        "svg",
        {
            "xmlns": "http://www.w3.org/2000/svg",
            "role": "img",
            "aria-label": _in_words(topology, parts),
            "viewBox": " ".join(_number(value) for value in (left, top, width, height)),
            "style": f"max-width:{_number(width)}px",
        },
    )
    ElementTree.SubElement(root, "title").text = f"Schematic: {topology}"
    _draw(root, layout, parts)
    _write(root, layout, parts)
    return ElementTree.tostring(root, encoding="unicode")


def _check(topology: str, parts: Mapping[str, Sketch]) -> None:
    if topology not in LAYOUTS:
        raise ValueError(
            f"there is no schematic of topology {topology!r}; there is one of {', '.join(LAYOUTS)}"
        )
    roles = {**in_lead(), **TOPOLOGIES[topology].roles}
    for key, role in roles.items():
        if role.absent == "required" and key not in parts:
            raise ValueError(f"topology {topology!r} needs a part in role {key!r}")
    for key, part in parts.items():
        if key not in roles:
            raise ValueError(
                f"topology {topology!r} has no role {key!r}; it has {', '.join(roles)}"
            )
        if part.kind not in roles[key].kinds:
            raise ValueError(
                f"role {key!r} of topology {topology!r} is a {' or '.join(roles[key].kinds)}, "
                f"not {part.kind!r} ({part.reference})"
            )


def _in_words(topology: str, parts: Mapping[str, Sketch]) -> str:
    """What the picture shows, for whoever cannot see it."""
    minus = TOPOLOGIES[topology].reference == "minus"
    words = {
        "broken": "plus" if minus else "minus",
        "straight": "minus" if minus else "plus",
        "zener": "cathode" if minus else "anode",
        "protect": "cathode" if minus else "anode",
    }
    said = [
        " ".join([NAMES[parts[role].kind], *parts[role].lines()[:1], place.format_map(words)])
        for role, place in PLACES.items()
        if role in parts
    ]
    if topology in ("pmos-pass", "nmos-pass") and "gate" not in parts:
        said.append(f"gate straight at the {words['straight']} lead")
    return (
        f"Schematic, topology {topology}: exposed terminals on the left, guarded terminals on "
        f"the right; {'; '.join(said)}."
    )


def _draw(root: ElementTree.Element, layout: Layout, parts: Mapping[str, Sketch]) -> None:
    """Symbols, wires, dots and terminals, through the drawing library."""
    import schemdraw
    import schemdraw.elements

    elm: Any = schemdraw.elements  # the library's own annotations are partial
    drawing: Any = schemdraw.Drawing(canvas="svg", show=False)
    drawing.config(color=INK, lw=1.5, inches_per_unit=UNIT / 72)
    for wire in layout.wires:
        for a, b in pairwise(wire):
            drawing.add(elm.Line().endpoints(a, b))
    for placed in layout.parts:
        drawing.add(symbol(parts[placed.role].kind, placed.terminals))
    for dot in layout.dots():
        drawing.add(elm.Dot(radius=0.085).at(dot))
    for port in layout.ports.values():
        drawing.add(elm.Dot(radius=0.12, open=True).at(port))
    drawing.draw(show=False, canvas=root)
    drawing.fig.getsvg()
    for element in root:
        if "style" in element.attrib:  # the library writes a dash for 'no dashes'
            element.set("style", element.attrib["style"].replace("stroke-dasharray:-;", ""))
        for key in {"d", "points"} & set(element.attrib):
            element.set(key, re.sub(r"-?\d+(\.\d+)?", _shorter, element.attrib[key]))


def symbol(kind: str, terminals: tuple[Point, ...]) -> Any:
    """The library's symbol of a kind with its terminals where they belong, in TERMINALS' order."""
    import schemdraw.elements
    from schemdraw.segments import Segment

    elm: Any = schemdraw.elements
    if kind in ("p-mosfet", "n-mosfet"):
        drain, _, source = terminals
        p = kind == "p-mosfet"
        made = (elm.PMos2 if p else elm.NMos2)(diode=True).scale(MOSFET_SCALE).flip()
        return made.endpoints(*((source, drain) if p else (drain, source)))
    if kind in ("npn", "pnp"):
        made = (elm.BjtNpn if kind == "npn" else elm.BjtPnp)().scale(BIPOLAR_SCALE)
        return made.right().anchor("base").at(terminals[1])
    made = {
        "diode": elm.Diode, "tvs": elm.Zener, "zener": elm.Zener, "resistor": elm.ResistorIEC,
        "lead": elm.ResistorIEC,
        "fuse": elm.FuseIEEE,  # the library's name; its FuseIEC is the older symbol
    }[kind]()  # fmt: skip
    if kind == "lead":
        first, *box, gap, last = made.segments[0].path
        made.segments = [Segment([first, gap, last]), Segment([first, *box], ls="--")]
    if kind in POLAR:
        made.scale(DIODE_SCALE)
    return made.endpoints(*terminals)


def _write(root: ElementTree.Element, layout: Layout, parts: Mapping[str, Sketch]) -> None:
    """All text, as text."""
    for placed in layout.parts:
        _text(root, placed.text, placed.side, parts[placed.role].lines())
    for letter, point in layout.letters:
        _text(root, point, "centre", [letter], small=True)
    for name, (x, y) in layout.ports.items():
        exposed = name.startswith("exposed")
        label = f"{name[:-1]} {'+' if name.endswith('+') else '−'}"
        _text(root, (x - 0.3 if exposed else x + 0.3, y), "left" if exposed else "right", [label])
    middle = layout.height / 2
    _text(root, (-0.3, middle), "left", ["can be wired", "backwards"], small=True)
    _text(root, (layout.width + 0.3, middle), "right", ["equipment", "side"], small=True)


def _text(
    root: ElementTree.Element, at: Point, side: Any, lines: list[str], *, small: bool = False
) -> None:
    """Lines of text above, below, left or right of a point, or centred on it."""
    size, step = (SMALL, SMALL + 2.0) if small else (SIZE, LINE)
    anchor = {"right": "start", "left": "end"}.get(side, "middle")
    x, y = at[0] * UNIT, -at[1] * UNIT
    rise, capital = step * (len(lines) - 1), 0.72 * size
    baseline = {"above": y - rise, "below": y + capital}.get(side, y + (capital - rise) / 2)
    for i, line in enumerate(lines):
        text = ElementTree.SubElement(
            root,
            "text",
            {
                "x": _number(x),
                "y": _number(baseline + step * i),
                "text-anchor": anchor,
                "font-size": _number(size),
                "fill": SOFT if small else INK,
                **({"font-weight": "600"} if i == 0 and not small else {}),
            },
        )
        text.text = "".join(c for c in line if c.isprintable())


def _frame(layout: Layout, parts: Mapping[str, Sketch]) -> tuple[float, float, float, float]:
    """The view: the leads, the terminals' names beside them and the text above or below them."""
    beside = 2.8

    def room(side: Side) -> float:
        heights = [
            abs(placed.text[1] - (layout.height if side == "above" else 0.0)) * UNIT
            + LINE * len(parts[placed.role].lines())
            for placed in layout.parts
            if placed.side == side and _outside(placed, layout)
        ]
        return max([0.4 * UNIT, *heights]) + 4.0

    over, under = room("above"), room("below")
    return (
        -beside * UNIT,
        -layout.height * UNIT - over,
        (layout.width + 2 * beside) * UNIT,
        layout.height * UNIT + over + under,
    )


def _outside(placed: Placed, layout: Layout) -> bool:
    return not 0.0 <= placed.text[1] <= layout.height


def _number(value: float) -> str:
    return f"{round(value, 2) + 0.0:.2f}".rstrip("0").rstrip(".")


def _shorter(found: re.Match[str]) -> str:
    return _number(float(found[0]))
