"""One row of a block diagram: places along a straight path, buses above and below it.

The path lies at y = 0 and runs to the right.  Place -1 is the input of the row, places
0 ... m-1 are blocks and place m is the exit.  A block enters through summing circles, one
for each pair of buses that arrive above and below, and leaves through taps, one for each
pair of buses that start there.  Buses that do not overlap share a track; short ones lie
nearer the path.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

from netlist.blocks.buses import Bus, Link, buses
from netlist.blocks.numbers import gain_text
from netlist.blocks.shapes import (
    GAIN_HEIGHT,
    GAIN_WIDTH,
    INTEGRATOR_WIDTH,
    SUM_RADIUS,
    TEXT_SIZE,
)
from netlist.svg import text_width
from synth.graph import Block

__all__ = ["LEAD", "Column", "Place", "Row", "Slot", "Track", "laid_out"]

LEAD = 20.0  # wire before a part, room for the arrow and the sign
_GAP = 12.0  # between a part and the next tap
_CLEAR = 4.0  # between what stands beside each other
_NEAR_PATH = 30.0  # what stands on the path reaches this far up and down
_HALF_LINE, _HALF_SUM, _HALF_GAIN = 8.0, SUM_RADIUS + 14, GAIN_WIDTH / 2


@dataclass
class Slot:
    """Where a bus leaves the path (a tap) or comes back to it (an entry).

    `link` is the one connection that runs here, None where the whole bus does; `text` is that
    of an upright gain box, `circle` whether an entry ends at a summing circle.
    """

    place: int
    half: float
    link: Link | None = None
    text: str = ""
    circle: bool = False
    x: float = 0.0


@dataclass
class Column:
    """Slots above and below the path at one x; a `circle` adds what comes in."""

    above: Slot | None
    below: Slot | None
    circle: bool = False
    x: float = 0.0

    @property
    def slots(self) -> Iterator[Slot]:
        """The slots there are."""
        return (s for s in (self.above, self.below) if s is not None)


@dataclass
class Place:
    """One block (None at both ends of the row), what leads to it and away from it.

    `text` is that of a gain box on the straight link, `label` the name over the output line;
    `output_x` is where that line starts.
    """

    block: Block | None
    straight: Link | None = None
    text: str = ""
    label: str = ""
    label_x: float = 0.0
    gain_x: float = 0.0
    entries: list[Column] = field(default_factory=list)
    taps: list[Column] = field(default_factory=list)
    integrator_x: float = 0.0
    output_x: float = 0.0


@dataclass
class Track:
    """A bus with its slots on the line `y`; `text` is that of a gain box lying on the line."""

    bus: Bus
    taps: list[Slot]
    entries: list[Slot]
    text: str = ""
    gain_x: float = 0.0
    y: float = 0.0

    @property
    def slots(self) -> list[Slot]:
        """All slots."""
        return [*self.taps, *self.entries]

    @property
    def ends(self) -> tuple[float, float]:
        """Leftmost and rightmost x."""
        xs = [s.x for s in self.slots]
        return min(xs), max(xs)

    @property
    def extent(self) -> tuple[float, float]:
        """From left to right with what stands at the ends."""
        return min(s.x - s.half for s in self.slots), max(s.x + s.half for s in self.slots)

    @property
    def sums(self) -> bool:
        """Whether there are summing circles on the line."""
        return len(self.taps) > 1

    @property
    def inside(self) -> float:
        """Room needed between the line and what is nearer the path."""
        if any(s.text for s in self.slots):
            return SUM_RADIUS + LEAD + GAIN_HEIGHT + _GAP
        return 34.0 if self.sums else GAIN_HEIGHT / 2 + 6 if self.text else 12.0

    @property
    def outside(self) -> float:
        """Room needed beyond the line."""
        return 20.0 if self.sums else GAIN_HEIGHT / 2 + 2 if self.text else 4.0


@dataclass
class Row:
    """A row with every coordinate; `places[k + 1]` is place k."""

    places: list[Place]
    tracks: list[Track]
    width: float = 0.0
    top: float = 0.0
    bottom: float = 0.0


def laid_out(source: str, blocks: Sequence[Block], leaves: str, *, named: str = "") -> Row:
    """Lay out `blocks`, driven by signal `source`, with signal `leaves` going on at the right.

    `named` is what to write over the line where the row starts.
    """
    upright: set[Link] = set()
    while True:
        made = _with_columns(source, blocks, leaves, upright)
        made.places[0].label = named
        _set_x(made)
        crowded = {t.bus.links[0] for t in made.tracks if t.text and not _lay_gain(t, made)}
        if not crowded:
            break
        upright |= crowded
    made.top = -_stack([t for t in made.tracks if t.bus.above], -1)
    made.bottom = _stack([t for t in made.tracks if not t.bus.above], 1)
    return made


def _with_columns(source: str, blocks: Sequence[Block], leaves: str, upright: set[Link]) -> Row:
    """Places with their columns, no coordinates yet."""
    at = {source: -1} | {b.name: k for k, b in enumerate(blocks)}
    links = [
        Link(at[t.source], k, float(t.weight), alone=len(b.terms) == 1)
        for k, b in enumerate(blocks)
        for t in b.terms
    ]
    links.append(Link(at[leaves], len(blocks), 1.0, alone=True))
    places = [Place(None), *(Place(b, label=b.name) for b in blocks), Place(None)]
    boxes = {k: _box(k, places[k.target + 1].block) for k in links}
    for link in links:
        if link.straight:
            places[link.target + 1].straight = link
            places[link.target + 1].text = boxes[link]
    tracks = []
    for above in (True, False):
        beside = [k for k in links if not k.straight and k.above == above]
        tracks += [_track(bus, boxes, upright) for bus in buses(beside, above=above)]
    for k, place in enumerate(places):
        place.entries = _columns(tracks, k - 1, entries=True)
        place.taps = _columns(tracks, k - 1, entries=False)
        for n, column in enumerate(place.entries):
            from_left = n > 0 or place.straight is not None
            column.circle = from_left + len(list(column.slots)) > 1
            for slot in column.slots:
                slot.circle = column.circle
    return Row(places, tracks)


def _box(link: Link, target: Block | None) -> str:
    """Text of the gain box of a link, empty when it needs none: a gain of one, its sign at a
    summing circle.  An adder that reads one signal keeps its box, so that it is seen."""
    if link.alone:
        adder = target is not None and not target.is_integrator
        return "" if link.weight == 1 and not adder else gain_text(link.weight)
    return "" if abs(link.weight) == 1 else gain_text(abs(link.weight))


def _track(bus: Bus, boxes: dict[Link, str], upright: set[Link]) -> Track:
    """A bus with its slots; the gain of a lone connection lies on the line if it fits."""
    if len(bus.links) == 1:
        (link,) = bus.links
        text = boxes[link]
        lying = link not in upright
        tap = Slot(link.source, _HALF_LINE, link)
        if text and not lying:
            tap = Slot(link.source, _HALF_GAIN, link, text)
        return Track(bus, [tap], [Slot(link.target, _HALF_SUM, link)], text if lying else "")
    hub = Slot(bus.hub, _HALF_LINE if bus.spreads else _HALF_SUM)
    rest = [
        Slot(
            k.target if bus.spreads else k.source,
            max(_HALF_SUM, _HALF_GAIN if boxes[k] else 0),
            k,
            boxes[k],
        )
        for k in bus.links
    ]
    return Track(bus, [hub], rest) if bus.spreads else Track(bus, rest, [hub])


def _columns(tracks: list[Track], place: int, *, entries: bool) -> list[Column]:
    """The entries or taps of a place, paired above and below so that they do not cross.

    Above, what comes from near enters left of what comes from far, and what goes far leaves
    left of what goes near; below it is the other way round.
    """
    sides: dict[bool, list[Slot]] = {}
    for above in (True, False):
        here = [
            (track.bus.reach, slot)
            for track in tracks
            if track.bus.above == above
            for slot in (track.entries if entries else track.taps)
            if slot.place == place
        ]
        here.sort(key=lambda pair: pair[0], reverse=entries != above)
        sides[above] = [slot for _, slot in here]
    above_slots, below_slots = sides[True], sides[False]
    return [
        Column(
            above_slots[k] if k < len(above_slots) else None,
            below_slots[k] if k < len(below_slots) else None,
        )
        for k in range(max(len(above_slots), len(below_slots)))
    ]


def _set_x(made: Row) -> None:
    """Every x, from left to right."""
    # A row that goes on from another is reached from above, at its left edge, and left downwards.
    taken = {"above": 0.0 if made.places[0].label else -1e9, "below": -1e9}

    def put(column: Column, x: float) -> float:
        sides = [(s, getattr(column, s)) for s in ("above", "below")]
        for side, slot in sides:
            if slot is not None:
                x = max(x, taken[side] + _CLEAR + slot.half)
        for side, slot in sides:
            if slot is not None:
                slot.x = x
                taken[side] = x + slot.half
        column.x = x
        return x

    cursor = 0.0
    for place in made.places:
        if place.text:
            place.gain_x = cursor + LEAD + GAIN_WIDTH / 2
            cursor = place.gain_x + GAIN_WIDTH / 2
        for column in place.entries:
            cursor = put(column, cursor + LEAD + SUM_RADIUS)
            cursor += SUM_RADIUS if column.circle else 0
        if place.block is not None and place.block.is_integrator:
            place.integrator_x = cursor + LEAD + INTEGRATOR_WIDTH / 2
            cursor = place.integrator_x + INTEGRATOR_WIDTH / 2
        place.output_x = cursor
        # The sign above the last circle of an adder stands where the name would start.
        signed = not place.integrator_x and place.entries and place.entries[-1].circle
        place.label_x = cursor + (13 if signed and place.entries[-1].above else 5)
        if place.label:
            cursor = max(cursor + _GAP, place.label_x + text_width(place.label, TEXT_SIZE) + 4)
        else:
            cursor += _GAP if place is made.places[0] else LEAD
        for k, column in enumerate(place.taps):
            cursor = put(column, cursor + (_GAP if k else 0))
    made.width = max(cursor, taken["below"] + _CLEAR)


def _lay_gain(track: Track, made: Row) -> bool:
    """Put the gain box of a lone connection on its line, clear of everything that crosses it."""
    left, right = track.ends
    crossing = {
        s.x
        for t in made.tracks
        if t.bus.above == track.bus.above
        for s in t.slots
        if left < s.x < right
    }
    walls = [left, *sorted(crossing), right]
    need = GAIN_WIDTH + 2 * _GAP
    middle = (left + right) / 2
    rooms = [(a, b) for a, b in pairwise(walls) if b - a >= need]
    if not rooms:
        return False
    spots = [min(max(middle, a + need / 2), b - need / 2) for a, b in rooms]
    track.gain_x = min(spots, key=lambda x: abs(x - middle))
    return True


def _stack(tracks: list[Track], sign: int) -> float:
    """Give every track of one side its y, short ones first, each as near the path as it fits;
    returns how far they reach."""
    placed: list[Track] = []
    for track in sorted(tracks, key=lambda t: (t.ends[1] - t.ends[0], t.ends)):
        left, right = track.extent
        beside = [t for t in placed if left < t.extent[1] and t.extent[0] < right]
        bands = [(abs(t.y) - t.inside, abs(t.y) + t.outside) for t in beside]
        need = track.inside + track.outside
        starts = sorted({_NEAR_PATH, *(end for _, end in bands)})
        base = next(s for s in starts if all(s + need <= a or b <= s for a, b in bands))
        track.y = sign * (base + track.inside)
        placed.append(track)
    return max((abs(t.y) + t.outside for t in placed), default=_NEAR_PATH)
