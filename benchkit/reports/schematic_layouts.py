"""Where every part of a stage's schematic goes, one function for each shape of picture.

Each picture is laid out once, as a P-channel stage with its broken lead at the top; the N-channel
picture is its mirror, top for bottom, with every polar part turned round.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

from benchkit.reports.schematic_sheet import (
    BIPOLAR_REACH,
    HORIZONTAL,
    MOSFET_GATE,
    VERTICAL,
    Layout,
    Point,
    Sheet,
    Sketch,
)
from benchkit.topologies import TOPOLOGIES


def _clamp(parts: Mapping[str, Sketch], mirrored: bool) -> Layout:
    sheet = Sheet(parts, 2.8)
    inner = sheet.in_lead()
    node = (max(inner[0] + 0.5, 1.2), sheet.top)
    sheet.wire(inner, node)
    sheet.upright("clamp", (node[0], 0.0), node)
    return sheet.finish(node, node[0] + max(1.2, sheet.room("clamp") + 0.9), mirrored=mirrored)


def _series_diode(parts: Mapping[str, Sketch], mirrored: bool) -> Layout:
    sheet = Sheet(parts, 2.0)
    inner = sheet.in_lead()
    anode = (inner[0] + 0.3, sheet.top)
    end = (anode[0] + max(HORIZONTAL, sheet.room("diode") + 0.4), sheet.top)
    sheet.wire(inner, anode)
    sheet.level("diode", anode, end)
    return sheet.finish(end, end[0] + 0.3, mirrored=mirrored)


def _pass(parts: Mapping[str, Sketch], mirrored: bool) -> Layout:
    zener = "zener" in parts
    below = MOSFET_GATE[1] + 0.45 * zener
    sheet = Sheet(parts, below + (VERTICAL if "gate" in parts else 0.8))
    inner = sheet.in_lead()
    drain = (inner[0] + sheet.pass_room(), sheet.top)
    sheet.wire(inner, drain)
    gate, source = sheet.mosfet(drain)
    node = (gate[0], sheet.top - below)
    sheet.wire(gate, node)
    sheet.upright("gate", node, (node[0], 0.0))
    end = source
    if zener:
        end = _gate_to_source(sheet, {"zener": node}, source)
    width = max(end[0] + sheet.pass_room() + 0.3, node[0] + sheet.room("gate") + 0.7)
    return sheet.finish(end, width, mirrored=mirrored)


def _gate_to_source(sheet: Sheet, rows: Mapping[str, Point], source: Point) -> Point:
    """Parts from the gate to the source, one under the other; returns their node at the source."""
    gate_x = next(iter(rows.values()))[0]
    x = max(source[0] + 0.3, *(gate_x + max(HORIZONTAL, sheet.room(role) + 0.5) for role in rows))
    for role, node in rows.items():
        sheet.level(role, node, (x, node[1]))
    corners = [(x, node[1]) for node in rows.values()]
    sheet.wire((x, sheet.top), *corners)
    sheet.wire(source, (x, sheet.top))
    return (x, sheet.top)


def _sensed(parts: Mapping[str, Sketch], mirrored: bool) -> Layout:
    rows = [role for role in ("hold", "zener") if role in parts]
    shunts = [role for role in ("protect", "bleed") if role in parts]
    row, first = 1.75, MOSFET_GATE[1] + 0.45
    gate_end = first + row * (len(rows) - 1)
    collector = gate_end + (VERTICAL if "pull" in parts else 0.7)
    sheet = Sheet(parts, collector + BIPOLAR_REACH[1] + (VERTICAL if shunts else 1.25))
    top = sheet.top
    base_y = top - collector - BIPOLAR_REACH[1]

    # The base is fed from the terminal itself, before fuse and lead.
    node = (0.5, top)
    sheet.wire((0.0, top), node)
    inner = sheet.in_lead(node[0])
    sheet.upright("base", node, (node[0], base_y))
    x = node[0]
    columns = []
    for role in shunts:
        columns.append(x)
        rail, base = (x, 0.0), (x, base_y)
        sheet.upright(role, *((rail, base) if role == "protect" else (base, rail)))
        x += max(1.6, sheet.room(role) + 1.0)
    gate_x = max(
        x + 0.4 + BIPOLAR_REACH[0],
        node[0] + sheet.room("base") + 0.8,
        inner[0] + sheet.pass_room() + MOSFET_GATE[0],
    )
    base = (gate_x - BIPOLAR_REACH[0], base_y)
    sheet.wire(*((column, base_y) for column in columns or [node[0]]), base)

    drain = (gate_x - MOSFET_GATE[0], top)
    sheet.wire(inner, drain)
    gate, source = sheet.mosfet(drain)
    nodes = {role: (gate_x, top - first - row * i) for i, role in enumerate(rows)}
    sheet.wire(gate, *nodes.values())
    end = _gate_to_source(sheet, nodes, source)
    reach = BIPOLAR_REACH[1]
    ends = ((gate_x, base_y + reach), base, (gate_x, base_y - reach))
    sheet.upright("pull", (gate_x, top - gate_end), ends[0])
    sheet.place("sense", ends, (gate_x + 0.3, base_y), "right")
    sheet.wire(ends[2], (gate_x, 0.0))
    beside = max(sheet.room("sense"), sheet.room("pull"))
    return sheet.finish(end, max(end[0] + 0.6, gate_x + beside + 0.7), mirrored=mirrored)


LAYOUTS: Mapping[str, Callable[[Mapping[str, Sketch], bool], Layout]] = {
    "clamp": _clamp,
    "fused-clamp": _clamp,
    "series-diode": _series_diode,
    "pmos-pass": _pass,
    "pmos-pass-zener": _pass,
    "pmos-sensed": _sensed,
    "nmos-pass": _pass,
    "nmos-pass-zener": _pass,
    "nmos-sensed": _sensed,
}


def lay_out(topology: str, parts: Mapping[str, Sketch]) -> Layout:
    """The picture of a topology; ``parts`` must already be checked against its roles."""
    return LAYOUTS[topology](parts, TOPOLOGIES[topology].reference == "plus")
