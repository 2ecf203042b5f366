"""The sheet a stage's schematic is laid out on: points and wires, without a drawing library.

Distances are in units of the drawing (a resistor's body is one unit long), x to the right, y up.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

from benchkit.topologies.base import POLAR

Point = tuple[float, float]
Side = Literal["above", "below", "right", "centre"]

MOSFET_LENGTH, MOSFET_GATE = 3.0, (2.1, 1.5)
"""From drain to source; and from drain to the end of the gate, along the lead and away from it."""

BIPOLAR_REACH = (1.025, 0.95)
"""From the base to collector and emitter: along the base lead, and to either side of it."""

CHARACTER = 0.215
"""Room for one character of a label; generous, because the page chooses the typeface."""

HORIZONTAL, VERTICAL = 1.9, 2.2
"""Shortest length of a part in a lead, and between leads."""

NAMED = {"tvs": "TVS", "lead": "lead"}
"""Kinds whose symbol could be taken for another's, so that a word says which it is."""


@dataclass(frozen=True)
class Sketch:
    """A fitted part: a reference such as Q1, its kind in a stage file, a short value or nothing."""

    reference: str
    kind: str
    label: str = ""

    def lines(self) -> list[str]:
        """The lines of text beside the symbol: the reference, then the value if there is one."""
        name = NAMED.get(self.kind, "")
        label = " ".join(self.label.split())
        if name and name.lower() not in label.lower():
            label = f"{name} {label}".strip()
        return [self.reference, *([label] if label else [])]


@dataclass(frozen=True)
class Placed:
    """A part on the sheet: its terminals in the order of ``topologies.base.TERMINALS``."""

    role: str
    terminals: tuple[Point, ...]
    text: Point
    side: Side


@dataclass(frozen=True)
class Layout:
    """A whole picture. ports: the four terminals by node name; letters: a MOSFET's terminals."""

    parts: tuple[Placed, ...]
    wires: tuple[tuple[Point, ...], ...]
    ports: Mapping[str, Point]
    letters: tuple[tuple[str, Point], ...]
    width: float
    height: float

    def dots(self) -> list[Point]:
        """Every point where three or more wires and terminals meet, from left to right."""
        points = {end for wire in self.wires for end in wire}
        points |= {terminal for placed in self.parts for terminal in placed.terminals}
        return sorted(point for point in points if self._meeting(point) >= 3)

    def _meeting(self, point: Point) -> int:
        ends = sum(placed.terminals.count(point) for placed in self.parts)
        for wire in self.wires:
            for a, b in pairwise(wire):
                ends += (point in (a, b)) or 2 * on_segment(point, a, b)
        return ends


def on_segment(point: Point, a: Point, b: Point) -> bool:
    """Whether a point lies on an upright or level piece of wire, its ends included."""
    return all(min(a[i], b[i]) <= point[i] <= max(a[i], b[i]) for i in (0, 1))


def snapped(point: Point) -> Point:
    """On a fine grid, so that what is meant to meet has the very same coordinates."""
    return (round(point[0], 3), round(point[1], 3))


class Sheet:
    """A picture in the making, in P-channel orientation: broken lead at the top."""

    def __init__(self, parts: Mapping[str, Sketch], height: float) -> None:
        self.parts = parts
        self.top = height
        self.placed: list[Placed] = []
        self.wires: list[tuple[Point, ...]] = []
        self.letters: list[tuple[str, Point]] = []

    def room(self, role: str) -> float:
        """The width of a part's text; nothing for a part that is not fitted."""
        if role not in self.parts:
            return 0.0
        return CHARACTER * max(len(line) for line in self.parts[role].lines())

    def wire(self, *points: Point) -> None:
        """A wire through these points; nothing where they are all one."""
        kept = [snapped(point) for point in points]
        kept = kept[:1] + [b for a, b in pairwise(kept) if a != b]
        if len(kept) > 1:
            self.wires.append(tuple(kept))

    def place(self, role: str, terminals: tuple[Point, ...], text: Point, side: Side) -> None:
        """A part with its terminals in their order, and the place of its text."""
        self.placed.append(Placed(role, tuple(snapped(t) for t in terminals), text, side))

    def away(self, role: str) -> float:
        """From the middle of a symbol to its text: clear of a breakdown diode's bent bar."""
        return 0.65 if self.parts[role].kind in POLAR else 0.42

    def level(self, role: str, start: Point, end: Point) -> None:
        """A part between two points of one row, its text above it."""
        text = ((start[0] + end[0]) / 2, start[1] + self.away(role))
        self.place(role, (start, end), text, "above")

    def upright(self, role: str, first: Point, second: Point) -> None:
        """Between two points of one column; a part that may be short and is absent is a wire."""
        if role in self.parts:
            text = (first[0] + self.away(role), (first[1] + second[1]) / 2)
            self.place(role, (first, second), text, "right")
        else:
            self.wire(first, second)

    def in_lead(self, x: float = 0.0) -> Point:
        """Fuse and lead from ``x`` on in the broken lead; returns the node behind them."""
        for role in ("fuse", "lead"):
            if role in self.parts:
                start, x = x, x + max(HORIZONTAL, self.room(role) + 0.4)
                self.level(role, (start, self.top), (x, self.top))
        return (x, self.top)

    def mosfet(self, drain: Point) -> tuple[Point, Point]:
        """The pass switch from its drain to the right; returns gate and source."""
        x, y = drain
        gate, source = (x + MOSFET_GATE[0], y - MOSFET_GATE[1]), (x + MOSFET_LENGTH, y)
        text = (x + MOSFET_LENGTH / 2, y + 0.8)
        self.place("pass", (drain, gate, source), text, "above")
        self.letters += [
            ("D", (x + 0.55, y - 0.3)),
            ("S", (source[0] - 0.55, y - 0.3)),
            ("G", (gate[0] - 0.3, y - 1.2)),
        ]
        return gate, source

    def pass_room(self) -> float:
        """What the pass switch needs on either side, so that its text has room above it."""
        return max(0.3, (self.room("pass") + 0.4 - MOSFET_LENGTH) / 2)

    def finish(self, end: Point, width: float, *, mirrored: bool) -> Layout:
        """Close both leads at the guarded terminals, and turn the picture over if it is N."""
        self.wire(end, (width, self.top))
        self.wire((0.0, 0.0), (width, 0.0))
        ports = {
            "exposed+": snapped((0.0, self.top)), "exposed-": (0.0, 0.0),
            "guarded+": snapped((width, self.top)), "guarded-": snapped((width, 0.0)),
        }  # fmt: skip
        if not mirrored:
            return Layout(
                tuple(self.placed), tuple(self.wires), ports, tuple(self.letters), width, self.top
            )

        def over(point: Point) -> Point:
            return snapped((point[0], self.top - point[1]))

        def turned(placed: Placed) -> Placed:
            terminals = tuple(over(point) for point in placed.terminals)
            if self.parts[placed.role].kind in POLAR:
                terminals = terminals[::-1]
            sides: dict[Side, Side] = {"above": "below", "below": "above"}
            return Placed(
                placed.role, terminals, over(placed.text), sides.get(placed.side, placed.side)
            )

        return Layout(
            tuple(turned(placed) for placed in self.placed),
            tuple(tuple(over(point) for point in wire) for wire in self.wires),
            ports,
            tuple((letter, over(point)) for letter, point in self.letters),
            width,
            self.top,
        )
