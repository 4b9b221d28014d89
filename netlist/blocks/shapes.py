"""The parts of a block diagram and how each is written as SVG.

Coordinates are in px, y grows downwards.  A gain is a box with a point on the side its signal
leaves, an integrator a box with 1/s, a sum a circle with a sign beside each input, a dot a
place where one signal goes several ways.  Wires that cross without a dot do not touch.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import TypeAlias

from netlist.svg import FONT, coordinate, escape

__all__ = [
    "ARROW",
    "DOT_RADIUS",
    "GAIN_HEIGHT",
    "GAIN_POINT",
    "GAIN_WIDTH",
    "INTEGRATOR_HEIGHT",
    "INTEGRATOR_WIDTH",
    "SUM_RADIUS",
    "TEXT_SIZE",
    "Dot",
    "Gain",
    "Integrator",
    "Label",
    "Point",
    "Shape",
    "Sum",
    "Terminal",
    "Wire",
    "document",
    "moved",
]

Point: TypeAlias = tuple[float, float]

TEXT_SIZE = 12.0
GAIN_WIDTH = 60.0
GAIN_HEIGHT = 28.0
GAIN_POINT = 7.0  # length of the point, part of the box
INTEGRATOR_WIDTH = 36.0
INTEGRATOR_HEIGHT = 44.0
SUM_RADIUS = 9.0
DOT_RADIUS = 3.0
TERMINAL_RADIUS = 4.0
ARROW = 8.0

_INK = "#20262e"
_RULES = {
    "text": f"font-family:{FONT};fill:{_INK}",
    ".wire": f"fill:none;stroke:{_INK};stroke-width:1.3;stroke-linejoin:round",
    ".arrow": f"fill:{_INK}",
    ".dot": f"fill:{_INK}",
    ".gain": f"fill:#fff;stroke:{_INK};stroke-width:1.3;stroke-linejoin:round",
    ".integrator": f"fill:#e6eef5;stroke:{_INK};stroke-width:1.7",
    ".bar": f"stroke:{_INK};stroke-width:1.2",
    ".sum": f"fill:#fff;stroke:{_INK};stroke-width:1.3",
    ".terminal": f"fill:#fff;stroke:{_INK};stroke-width:1.3",
    ".name": "font-style:italic",
    ".symbol": "font-style:italic",
    ".title": "font-weight:bold",
    ".note": "fill:#56606c",
}


@dataclass(frozen=True)
class Wire:
    """A line of horizontal and vertical pieces; with `arrow` it ends at the input of a part."""

    points: tuple[Point, ...]
    arrow: bool = False

    def svg(self) -> str:
        """The line, and its arrowhead."""
        points = list(self.points)
        if not self.arrow:
            return _polyline(points)
        (x0, y0), (x1, y1) = points[-2:]
        dx, dy = _sign(x1 - x0), _sign(y1 - y0)
        base = (x1 - ARROW * dx, y1 - ARROW * dy)
        head = (
            (x1, y1),
            (base[0] - 3.5 * dy, base[1] - 3.5 * dx),
            (base[0] + 3.5 * dy, base[1] + 3.5 * dx),
        )
        points[-1] = base
        return _polyline(points) + f'<polygon class="arrow" points="{_points(head)}"/>'


@dataclass(frozen=True)
class Dot:
    """A branch point."""

    x: float
    y: float

    def svg(self) -> str:
        """A filled dot."""
        return _circle("dot", self.x, self.y, DOT_RADIUS)


@dataclass(frozen=True)
class Sum:
    """A summing circle."""

    x: float
    y: float

    def svg(self) -> str:
        """An open circle."""
        return _circle("sum", self.x, self.y, SUM_RADIUS)


@dataclass(frozen=True)
class Terminal:
    """Where the signal enters or leaves the diagram."""

    x: float
    y: float

    def svg(self) -> str:
        """A small open circle."""
        return _circle("terminal", self.x, self.y, TERMINAL_RADIUS)


@dataclass(frozen=True)
class Gain:
    """A constant gain; `toward` is ``"right"``, ``"left"``, ``"up"`` or ``"down"``."""

    x: float
    y: float
    toward: str
    text: str

    def svg(self) -> str:
        """A box with a point where the signal leaves, the gain inside."""
        w, h, p = GAIN_WIDTH / 2, GAIN_HEIGHT / 2, GAIN_POINT
        corners: list[Point]
        shift = (0.0, 0.0)
        if self.toward in ("right", "left"):
            d = 1 if self.toward == "right" else -1
            corners = [(-w * d, -h), (w * d - p * d, -h), (w * d, 0), (w * d - p * d, h)]
            corners.append((-w * d, h))
            shift = (-p * d / 2, 0.0)
        else:
            d = 1 if self.toward == "down" else -1
            corners = [(-w, -h * d), (w, -h * d), (w, h * d - p * d), (0, h * d)]
            corners.append((-w, h * d - p * d))
            shift = (0.0, -p * d / 2)
        shape = _points((self.x + dx, self.y + dy) for dx, dy in corners)
        text = Label(self.x + shift[0], self.y + shift[1] + 4, self.text, "middle", size=11)
        return f'<polygon class="gain" points="{shape}"/>' + text.svg()


@dataclass(frozen=True)
class Integrator:
    """1/s, from left to right."""

    x: float
    y: float

    def svg(self) -> str:
        """A box with 1 over s."""
        w, h = INTEGRATOR_WIDTH, INTEGRATOR_HEIGHT
        box = (
            f'<rect class="integrator" x="{coordinate(self.x - w / 2)}" '
            f'y="{coordinate(self.y - h / 2)}" width="{coordinate(w)}" height="{coordinate(h)}"/>'
        )
        bar = (
            f'<line class="bar" x1="{coordinate(self.x - 8)}" y1="{coordinate(self.y)}" '
            f'x2="{coordinate(self.x + 8)}" y2="{coordinate(self.y)}"/>'
        )
        over = Label(self.x, self.y - 5, "1", "middle")
        under = Label(self.x, self.y + 14, "s", "middle", kind="symbol")
        return box + bar + over.svg() + under.svg()


@dataclass(frozen=True)
class Label:
    """Text on the baseline y; `anchor` is ``"start"``, ``"middle"`` or ``"end"``."""

    x: float
    y: float
    text: str
    anchor: str = "start"
    kind: str = ""
    size: float = TEXT_SIZE

    def svg(self) -> str:
        """The text."""
        kind = f' class="{self.kind}"' if self.kind else ""
        return (
            f'<text{kind} x="{coordinate(self.x)}" y="{coordinate(self.y)}" '
            f'font-size="{coordinate(self.size)}" text-anchor="{self.anchor}">'
            f"{escape(self.text)}</text>"
        )


Shape: TypeAlias = Wire | Dot | Sum | Terminal | Gain | Integrator | Label


def moved(shape: Shape, dx: float, dy: float) -> Shape:
    """The same shape elsewhere."""
    if isinstance(shape, Wire):
        return replace(shape, points=tuple((x + dx, y + dy) for x, y in shape.points))
    return replace(shape, x=shape.x + dx, y=shape.y + dy)


def document(shapes: Iterable[Shape], *, width: float, height: float, description: str) -> str:
    """A whole SVG: wires first, parts over them, text last.

    The text of the drawing stays text, and there is no id in it, so that it can be inlined in
    a page beside others.
    """
    order = (Wire, Dot, Sum, Terminal, Gain, Integrator, Label)
    drawn = sorted(shapes, key=lambda shape: order.index(type(shape)))
    w, h = coordinate(width), coordinate(height)
    head = (
        f'<svg xmlns="http://www.w3.org/2000/svg" class="block-diagram" role="img" '
        f'width="{w}" height="{h}" viewBox="0 0 {w} {h}">'
    )
    style = "".join(f".block-diagram {name}{{{rule}}}" for name, rule in _RULES.items())
    body = "\n".join(shape.svg() for shape in drawn)
    return (
        f"{head}\n<title>{escape(description)}</title>\n<style>{style}</style>\n"
        f'<rect width="{w}" height="{h}" fill="#fff"/>\n{body}\n</svg>\n'
    )


def _circle(kind: str, x: float, y: float, radius: float) -> str:
    return (
        f'<circle class="{kind}" cx="{coordinate(x)}" cy="{coordinate(y)}" '
        f'r="{coordinate(radius)}"/>'
    )


def _polyline(points: Iterable[Point]) -> str:
    return f'<polyline class="wire" points="{_points(points)}"/>'


def _points(points: Iterable[Point]) -> str:
    return " ".join(f"{coordinate(x)},{coordinate(y)}" for x, y in points)


def _sign(value: float) -> int:
    return (value > 0) - (value < 0)
