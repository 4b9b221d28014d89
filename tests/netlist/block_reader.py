"""Reads a block diagram back from its SVG: shapes, nets, and the graph they make.

Only geometry and visible text count.  Wires are joined where their ends meet and where a dot
lies on both; wires that merely cross stay apart.
"""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from collections import defaultdict
from dataclasses import dataclass, field
from itertools import pairwise

from netlist.blocks.shapes import SUM_RADIUS
from netlist.svg import text_width

NEAR = 0.05
SVG = "{http://www.w3.org/2000/svg}"
PREFIXES = {"f": -15, "p": -12, "n": -9, "µ": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9, "T": 12}


@dataclass
class Drawing:
    """Everything visible, by kind."""

    size: tuple[float, float] = (0.0, 0.0)
    wires: list = field(default_factory=list)
    arrows: list = field(default_factory=list)
    gains: list = field(default_factory=list)
    integrators: list = field(default_factory=list)
    circles: dict = field(default_factory=lambda: defaultdict(list))
    texts: list = field(default_factory=list)

    @property
    def segments(self):
        """Every straight piece, arrowheads included."""
        pieces = [pair for wire in self.wires for pair in pairwise(wire)]
        return pieces + [(base, tip) for tip, base in self.arrows]


def read_drawing(svg: str) -> Drawing:
    root = ET.fromstring(svg)
    out = Drawing(size=(float(root.get("width")), float(root.get("height"))))
    for el in root:
        tag, kind = el.tag.removeprefix(SVG), el.get("class", "")
        if tag == "polyline":
            out.wires.append(_points(el))
        elif tag == "polygon" and kind == "arrow":
            tip, a, b = _points(el)
            out.arrows.append((tip, ((a[0] + b[0]) / 2, (a[1] + b[1]) / 2)))
        elif tag == "polygon":
            out.gains.append(_points(el))
        elif tag == "rect" and kind == "integrator":
            x, y, w, h = (float(el.get(k)) for k in ("x", "y", "width", "height"))
            out.integrators.append((x, y, x + w, y + h))
        elif tag == "circle":
            out.circles[kind].append((float(el.get("cx")), float(el.get("cy"))))
        elif tag == "text":
            size, x, y = (float(el.get(k)) for k in ("font-size", "x", "y"))
            width = text_width(el.text, size)
            left = x - {"start": 0, "middle": width / 2, "end": width}[el.get("text-anchor")]
            box = (left, y - 0.75 * size, left + width, y + 0.2 * size)
            out.texts.append((el.text, kind, box))
    return out


def read_graph(drawing: Drawing, *, input_label="u"):
    """``{block: (kind, {source: weight})}`` and the name of the output, as drawn."""
    nets = Nets(drawing)
    names = {}
    for text, kind, box in drawing.texts:
        if kind == "name":
            net = nets.under(box)
            if net is not None:
                names.setdefault(net, text)
                assert names[net] == text, "one net bears two names"
    assert len(set(names.values())) == len(names), "one name stands on two nets"
    label = next(b for t, k, b in drawing.texts if k == "name" and t == input_label)
    terminals = drawing.circles["terminal"]
    first, last = sorted(terminals, key=lambda c: abs(c[0] - label[2]) + abs(c[1] - label[3] + 6))
    names[nets.at(first)] = "in"
    drivers = _drivers(drawing, nets)

    def expression(net, *, root=False):
        if net in names and not root:
            return {names[net]: 1.0}
        kind, parts = drivers[net]
        assert kind != "integrator", "an integrator without a name"
        out = defaultdict(float)
        for weight, source in parts:
            for name, value in expression(source).items():
                out[name] += weight * value
        return dict(out)

    graph = {}
    for net, name in names.items():
        if name == "in":
            continue
        kind, parts = drivers[net]
        if kind == "integrator":
            ((_, source),) = parts
            graph[name] = (kind, expression(source))
        else:
            graph[name] = ("adder", expression(net, root=True))
    return graph, names[nets.at(last)]


def _drivers(drawing, nets):
    """What drives each net: its kind and its weighted input nets."""
    out = {}

    def drive(net, kind, parts):
        assert net not in out, "a net is driven twice"
        out[net] = (kind, parts)

    for x0, y0, x1, y1 in drawing.integrators:
        middle = (y0 + y1) / 2
        drive(nets.at((x1, middle)), "integrator", [(1.0, nets.at((x0, middle), arrow=True))])
    for corners in drawing.gains:
        entry, leave = _ends_of_gain(corners)
        x0, y0, x1, y1 = bounds(corners)
        (text,) = [t for t, _, b in drawing.texts if inside(b, (x0, y0, x1, y1))]
        drive(nets.at(leave), "gain", [(number(text), nets.at(entry, arrow=True))])
    signs = [(t, b) for t, k, b in drawing.texts if t in "+−" and not k]
    for x, y in drawing.circles["sum"]:
        around = [
            (x - SUM_RADIUS, y),
            (x + SUM_RADIUS, y),
            (x, y - SUM_RADIUS),
            (x, y + SUM_RADIUS),
        ]
        entering = [p for p in around if nets.has_arrow(p)]
        leaving = [p for p in around if p not in entering and nets.has(p)]
        assert len(entering) >= 2 and len(leaving) == 1
        parts = [(_nearest_sign(signs, p), nets.at(p, arrow=True)) for p in entering]
        drive(nets.at(leaving[0]), "sum", parts)
    return out


def _nearest_sign(signs, point):
    """+1 or -1 from the sign nearest to the tip of an arrow, which must be close."""
    distance, text = min((_distance(_middle(b), point), t) for t, b in signs)
    assert distance < 16
    return 1.0 if text == "+" else -1.0


class Nets:
    """Wires joined into nets."""

    def __init__(self, drawing: Drawing) -> None:
        self.segments = drawing.segments
        self.tips = [tip for tip, _ in drawing.arrows]
        self.root = list(range(len(self.segments)))
        ends = [(p, k) for k, segment in enumerate(self.segments) for p in segment]
        for i, (p, a) in enumerate(ends):
            for q, b in ends[i + 1 :]:
                if _distance(p, q) < NEAR:
                    self._join(a, b)
        for dot in drawing.circles["dot"]:
            touching = [k for k, s in enumerate(self.segments) if on(dot, s)]
            for k in touching[1:]:
                self._join(touching[0], k)

    def _find(self, k):
        while self.root[k] != k:
            k = self.root[k]
        return k

    def _join(self, a, b):
        self.root[self._find(a)] = self._find(b)

    def has(self, point):
        return any(_distance(p, point) < NEAR for s in self.segments for p in s)

    def has_arrow(self, point):
        return any(_distance(tip, point) < NEAR for tip in self.tips)

    def at(self, point, *, arrow=None):
        """The net with a wire end at `point`; an arrow must or must not point there."""
        if arrow is not None:
            assert self.has_arrow(point) == arrow
        found = {
            self._find(k)
            for k, s in enumerate(self.segments)
            if any(_distance(p, point) < NEAR for p in s)
        }
        assert len(found) == 1, f"{len(found)} nets end at {point}"
        return found.pop()

    def under(self, box):
        """The net of the horizontal wire just under a text, if any."""
        x, y = (box[0] + 2, box[3] + 6 - 0.2 * 12)
        found = {
            self._find(k)
            for k, ((x0, y0), (x1, y1)) in enumerate(self.segments)
            if abs(y0 - y) < 1 and abs(y1 - y) < 1 and min(x0, x1) <= x <= max(x0, x1)
        }
        assert len(found) <= 1
        return found.pop() if found else None


def _ends_of_gain(corners):
    """Where a gain box is entered and left: its point is the one corner in the middle of a side."""
    x0, y0, x1, y1 = bounds(corners)
    mx, my = (x0 + x1) / 2, (y0 + y1) / 2
    for entry, leave in (
        ((x0, my), (x1, my)),
        ((x1, my), (x0, my)),
        ((mx, y0), (mx, y1)),
        ((mx, y1), (mx, y0)),
    ):
        if any(_distance(corner, leave) < NEAR for corner in corners):
            return entry, leave
    raise AssertionError("a gain box without a point")


def number(text: str) -> float:
    """The value of a gain as written."""
    mantissa, exponent, prefix = re.fullmatch(r"(−?[0-9.]+)(?:e(−?[0-9]+))?(\D?)", text).groups()
    power = int(exponent.replace("−", "-")) if exponent else PREFIXES[prefix]
    return float(mantissa.replace("−", "-")) * 10.0**power


def on(point, segment):
    (x0, y0), (x1, y1) = segment
    x, y = point
    return (
        min(x0, x1) - NEAR <= x <= max(x0, x1) + NEAR
        and min(y0, y1) - NEAR <= y <= max(y0, y1) + NEAR
    )


def bounds(points):
    xs, ys = zip(*points, strict=True)
    return min(xs), min(ys), max(xs), max(ys)


def inside(inner, outer):
    return (
        inner[0] >= outer[0]
        and inner[1] >= outer[1]
        and inner[2] <= outer[2]
        and inner[3] <= outer[3]
    )


def overlap(a, b, *, slack=0.01):
    return min(a[2], b[2]) - max(a[0], b[0]) > slack and min(a[3], b[3]) - max(a[1], b[1]) > slack


def _points(el):
    return [tuple(map(float, p.split(","))) for p in el.get("points").split()]


def _distance(p, q):
    return ((p[0] - q[0]) ** 2 + (p[1] - q[1]) ** 2) ** 0.5


def _middle(box):
    return (box[0] + box[2]) / 2, (box[1] + box[3]) / 2
