"""Reading a schematic back: which pins the drawn lines join, and what lies on what.

Nothing here looks at the net a wire is meant to carry: joints are found as a reader finds
them.  Wires join where they end at one point; a wire that ends within another one is joined to
it by a dot; wires that cross are not joined; flags of one name are one net; all grounds are one.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from itertools import combinations

from netlist.schematic.geometry import Box, Sheet, Wire, dots

Point = tuple[float, float]


@dataclass
class Groups:
    """Union-find over anything hashable."""

    parent: dict[object, object] = field(default_factory=dict)

    def root(self, x: object) -> object:
        self.parent.setdefault(x, x)
        while self.parent[x] != x:
            x = self.parent[x]
        return x

    def join(self, a: object, b: object) -> None:
        self.parent[self.root(a)] = self.root(b)


def read_nets(sheet: Sheet, named: set[str]) -> dict[frozenset[tuple[str, str]], set[str]]:
    """Pins (reference, pin) by net, with the names of `named` that flags give the net.

    Raises AssertionError for a drawing that a reader could not make sense of.
    """
    marked = {at for at, _ in dots(sheet.wires)}
    groups = Groups()
    for wire in sheet.wires:
        groups.join(("at", wire.start), ("at", wire.end))
    ends = Counter(p for w in sheet.wires for p in (w.start, w.end))
    for at, count in ends.items():
        through = [w for w in sheet.wires if _within(w, at)]
        if count + 2 * len(through) > 2:
            assert at in marked, f"three wires meet at {at} without a dot"
        for wire in through:
            groups.join(("at", at), ("at", wire.start))
    for at in marked:
        assert ends[at], f"a dot at {at}, where no wire ends"
    pins: list[tuple[str, str]] = []
    for symbol in sheet.symbols:
        for pin, at in symbol.pins:
            assert ends[at] == 1, f"{symbol.ref} {pin} at {at} meets {ends[at]} wires"
            if symbol.kind == "ground":
                groups.join(("at", at), ("name", "0"))
            else:
                pins.append((symbol.ref, pin))
                groups.join(("at", at), ("pin", symbol.ref, pin))
    for flag in sheet.flags:
        assert ends[flag.at] == 1, f"flag {flag.name} at {flag.at} meets {ends[flag.at]} wires"
        groups.join(("at", flag.at), ("name", flag.name))
    loose = [
        at
        for at, count in ends.items()
        if count == 1
        and not any(_within(w, at) for w in sheet.wires)
        and at not in {p for s in sheet.symbols for _, p in s.pins}
        and at not in {f.at for f in sheet.flags}
    ]
    assert not loose, f"wires that end nowhere: {loose}"
    nets: dict[object, set[tuple[str, str]]] = {}
    for ref, pin in pins:
        nets.setdefault(groups.root(("pin", ref, pin)), set()).add((ref, pin))
    names: dict[object, set[str]] = {}
    for name in named:
        names.setdefault(groups.root(("name", name)), set()).add(name)
    return {frozenset(group): names.get(root, set()) for root, group in nets.items()}


def overlapping_wires(sheet: Sheet) -> list[tuple[Wire, Wire]]:
    """Pairs of wires that lie on each other over more than a point."""
    lines: dict[tuple[bool, float], list[Wire]] = {}
    for wire in sheet.wires:
        lines.setdefault((_upright(wire), wire.start[not _upright(wire)]), []).append(wire)
    pairs = (pair for line in lines.values() for pair in combinations(line, 2))
    return [(a, b) for a, b in pairs if _shared_length(a, b) > 0]


def collisions(sheet: Sheet) -> list[str]:
    """What lies on something else: parts, flags and texts on each other, wires through them.

    An op-amp's reference stands inside its triangle; what meets a pin ends at the edge.
    """
    solid = [(f"{s.kind} {s.ref}", s.box) for s in sheet.symbols]
    solid += [(f"flag {f.name}", f.box) for f in sheet.flags]
    texts = [(f"text {t.text!r}", t.box) for t in sheet.texts]
    inside = {f"op_amp {t.text}": f"text {t.text!r}" for t in sheet.texts if t.bold}
    found = []
    for (a, box_a), (b, box_b) in combinations([*solid, *texts], 2):
        if _overlap(box_a, box_b) and inside.get(a) != b:
            found.append(f"{a} on {b}")
    for wire in sheet.wires:
        line = wire.box
        found += [f"wire of {wire.net} through {n}" for n, b in solid + texts if _cuts(line, b)]
    return found


def _overlap(a: Box, b: Box) -> bool:
    return a.left < b.right and b.left < a.right and a.top < b.bottom and b.top < a.bottom


def _cuts(line: Box, b: Box) -> bool:
    """Whether a line of no width runs inside a box, more than a hair."""
    hair = 0.01
    return (
        line.left < b.right - hair
        and b.left + hair < line.right
        and line.top < b.bottom - hair
        and b.top + hair < line.bottom
    )


def _upright(w: Wire) -> bool:
    return w.start[0] == w.end[0]


def _shared_length(a: Wire, b: Wire) -> float:
    """Of two wires on one line."""
    along = 1 if _upright(a) else 0
    low = max(min(w.start[along], w.end[along]) for w in (a, b))
    high = min(max(w.start[along], w.end[along]) for w in (a, b))
    return high - low


def _within(w: Wire, at: Point) -> bool:
    along = 1 if _upright(w) else 0
    low, high = sorted((w.start[along], w.end[along]))
    return w.start[1 - along] == at[1 - along] and low < at[along] < high
