"""What a drawing is made of: wires, dots, symbols, flags and texts with their places.

Coordinates are px, x to the right, y downwards; one px is a tenth of the grid.  A wire joins
whatever ends at its ends; a wire that ends within another one is joined to it by a dot; wires
that cross without a dot are not joined.  Flags and ports of one name are one net.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field, replace
from itertools import pairwise

from netlist.schematic import lettering

__all__ = ["Box", "Flag", "Point", "Rule", "Sheet", "Symbol", "Text", "Wire", "dots"]

Point = tuple[float, float]


@dataclass(frozen=True)
class Box:
    """A rectangle."""

    left: float
    top: float
    right: float
    bottom: float

    def overlaps(self, other: Box, gap: float = 0.0) -> bool:
        """Whether the two come closer than `gap`; touching is not overlapping."""
        return (
            self.left < other.right + gap
            and other.left < self.right + gap
            and self.top < other.bottom + gap
            and other.top < self.bottom + gap
        )


@dataclass(frozen=True)
class Wire:
    """A horizontal or vertical piece of wire.

    `net` is what it is meant to carry; `heavy` marks the main path.
    """

    start: Point
    end: Point
    net: str
    heavy: bool = False

    def __post_init__(self) -> None:
        if (self.start[0] != self.end[0]) == (self.start[1] != self.end[1]):
            raise ValueError(f"a wire from {self.start} to {self.end} is not along one axis")

    @property
    def box(self) -> Box:
        """Of no width."""
        (a, b), (c, d) = self.start, self.end
        return Box(min(a, c), min(b, d), max(a, c), max(b, d))

    def passes(self, at: Point) -> bool:
        """Whether `at` lies within it, the ends not included."""
        b = self.box
        on = b.left <= at[0] <= b.right and b.top <= at[1] <= b.bottom
        return on and at not in (self.start, self.end)


@dataclass(frozen=True)
class Symbol:
    """A part.

    Parameters
    ----------
    kind
        ``"resistor"``, ``"capacitor"``, ``"op_amp"`` or ``"ground"``.
    at
        Centre of a resistor or capacitor, middle of the back edge of an op-amp, top of a ground.
    pins
        Where wires meet it: ``"1"``, ``"2"``; ``"-"``, ``"+"``, ``"out"``; ``"0"``.
    upright
        Turned by a quarter.
    dashed
        Not a part of the board.
    hint
        Shown when the pointer rests on it.
    """

    kind: str
    ref: str
    at: Point
    box: Box
    pins: tuple[tuple[str, Point], ...]
    upright: bool = False
    dashed: bool = False
    hint: str = ""


@dataclass(frozen=True)
class Text:
    """A line of text; `at` is its anchor on the baseline, `side` is start, middle or end."""

    at: Point
    text: str
    size: float = 10.0
    side: str = "start"
    bold: bool = False
    tone: str = "ink"

    @property
    def box(self) -> Box:
        """Around the letters."""
        w = lettering.width(self.text, self.size, bold=self.bold)
        left = self.at[0] - {"start": 0.0, "middle": w / 2, "end": w}[self.side]
        y = self.at[1]
        top = y - lettering.ascent(self.size)
        return Box(left, top, left + w, y + lettering.descent(self.size))


FLAG_HEIGHT = 14.0
_FLAG_SIZE, _FLAG_TIP, _FLAG_PAD = 10.0, 7.0, 4.0


@dataclass(frozen=True)
class Flag:
    """A net's name in a box with a point to the right.

    The wire meets it at `at`: at the point, or with `leaving` at the flat side.  `port` marks
    the ends of the whole circuit.
    """

    name: str
    at: Point
    leaving: bool = False
    port: bool = False

    @property
    def length(self) -> float:
        """From the flat side to the point [px]."""
        return flag_length(self.name, port=self.port)

    @property
    def box(self) -> Box:
        """Around the outline."""
        x, y = self.at
        left = x if self.leaving else x - self.length
        return Box(left, y - FLAG_HEIGHT / 2, left + self.length, y + FLAG_HEIGHT / 2)

    @property
    def outline(self) -> tuple[Point, ...]:
        """Corners."""
        b, y = self.box, self.at[1]
        neck = b.right - _FLAG_TIP
        return (b.left, b.top), (neck, b.top), (b.right, y), (neck, b.bottom), (b.left, b.bottom)

    @property
    def lettering(self) -> Text:
        """The name inside."""
        at = (self.box.left + _FLAG_PAD, self.at[1] + 0.36 * _FLAG_SIZE)
        return Text(at, self.name, _FLAG_SIZE, bold=self.port, tone="accent")


def flag_length(name: str, *, port: bool = False) -> float:
    """Length of a flag [px], a whole number."""
    w = lettering.width(name, _FLAG_SIZE, bold=port)
    return float(int(w + 2 * _FLAG_PAD + _FLAG_TIP - 2) + 1)


@dataclass(frozen=True)
class Rule:
    """A line of the corner table, not a wire."""

    start: Point
    end: Point


@dataclass
class Sheet:
    """Everything on one drawing, in the order it was put there."""

    wires: list[Wire] = field(default_factory=list)
    symbols: list[Symbol] = field(default_factory=list)
    flags: list[Flag] = field(default_factory=list)
    texts: list[Text] = field(default_factory=list)
    rules: list[Rule] = field(default_factory=list)

    def wire(self, net: str, *points: Point, heavy: bool = False) -> None:
        """Pieces of wire from point to point; pieces of no length are left out."""
        for a, b in pairwise(points):
            if a != b:
                self.wires.append(Wire(a, b, net, heavy))

    def boxes(self) -> Iterator[Box]:
        """Boxes of everything but the corner table's lines."""
        for group in (self.wires, self.symbols, self.flags, self.texts):
            for item in group:
                yield item.box

    def shifted(self, dx: float, dy: float) -> Sheet:
        """The same sheet, moved."""

        def at(p: Point) -> Point:
            return p[0] + dx, p[1] + dy

        return Sheet(
            wires=[replace(w, start=at(w.start), end=at(w.end)) for w in self.wires],
            symbols=[
                replace(
                    s,
                    at=at(s.at),
                    box=Box(*at((s.box.left, s.box.top)), *at((s.box.right, s.box.bottom))),
                    pins=tuple((name, at(p)) for name, p in s.pins),
                )
                for s in self.symbols
            ],
            flags=[replace(f, at=at(f.at)) for f in self.flags],
            texts=[replace(t, at=at(t.at)) for t in self.texts],
            rules=[replace(r, start=at(r.start), end=at(r.end)) for r in self.rules],
        )

    @property
    def extent(self) -> Box:
        """Around everything but the corner table's lines."""
        boxes = list(self.boxes())
        return Box(
            min(b.left for b in boxes),
            min(b.top for b in boxes),
            max(b.right for b in boxes),
            max(b.bottom for b in boxes),
        )


def dots(wires: Iterable[Wire]) -> list[tuple[Point, bool]]:
    """Where three or more wires of one net meet, and whether a heavy one is among them."""
    by_net: dict[str, list[Wire]] = {}
    for wire in wires:
        by_net.setdefault(wire.net, []).append(wire)
    found: list[tuple[Point, bool]] = []
    for group in by_net.values():
        for at in dict.fromkeys(p for w in group for p in (w.start, w.end)):
            ends = [w for w in group if at in (w.start, w.end)]
            through = [w for w in group if w.passes(at)]
            if len(ends) + 2 * len(through) > 2:
                found.append((at, any(w.heavy for w in (*ends, *through))))
    return found
