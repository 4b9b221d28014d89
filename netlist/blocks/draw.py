"""A laid-out row as shapes: wires, parts, dots and text."""

from __future__ import annotations

from netlist.blocks.row import LEAD, Place, Row, Slot, Track
from netlist.blocks.shapes import (
    GAIN_HEIGHT,
    GAIN_WIDTH,
    INTEGRATOR_WIDTH,
    SUM_RADIUS,
    TEXT_SIZE,
    Dot,
    Gain,
    Integrator,
    Label,
    Point,
    Shape,
    Sum,
    Wire,
)
from netlist.svg import text_width

__all__ = ["row_shapes"]


def row_shapes(row: Row) -> list[Shape]:
    """Everything on and beside the path, from the input at x = 0 to the exit at `row.width`."""
    out: list[Shape] = []
    for k, place in enumerate(row.places):
        following = row.places[k + 1] if k + 1 < len(row.places) else None
        out += _way_in(row.places[k - 1] if k else None, place)
        out += _way_out(place, goes_on=following is not None and following.straight is not None)
    last = row.places[-1]
    start = last.entries[0].x if last.entries else row.places[-2].output_x
    out.append(Wire(((start, 0), (row.width, 0))))
    for track in row.tracks:
        out += _gathering(track) if track.sums else _spreading(track)
    return out


def _way_in(before: Place | None, place: Place) -> list[Shape]:
    """From the output of the place before to the output of this one."""
    out: list[Shape] = []
    at = before.output_x if before and place.straight else None
    sign = _sign(place.straight.weight) if place.straight else ""
    if place.text and at is not None:
        left = place.gain_x - GAIN_WIDTH / 2
        out += [Wire(((at, 0), (left, 0)), arrow=True), Gain(place.gain_x, 0, "right", place.text)]
        at = place.gain_x + GAIN_WIDTH / 2
    for column in place.entries:
        if column.circle:
            if at is not None:
                out.append(Wire(((at, 0), (column.x - SUM_RADIUS, 0)), arrow=True))
                out.append(_beside(column.x, 0, "left", sign))
            out.append(Sum(column.x, 0))
            if column.above:
                out.append(_beside(column.x, 0, "above", _carries(column.above)))
            if column.below:
                out.append(_beside(column.x, 0, "below", _carries(column.below)))
            at, sign = column.x + SUM_RADIUS, "+"
        else:
            at, sign = column.x, _carries(next(column.slots))
    if place.block is not None and place.block.is_integrator and at is not None:
        left = place.integrator_x - INTEGRATOR_WIDTH / 2
        out += [Wire(((at, 0), (left, 0)), arrow=True), Integrator(place.integrator_x, 0)]
    if place.label:
        out.append(Label(place.label_x, -6, place.label, kind="name"))
    return out


def _way_out(place: Place, *, goes_on: bool) -> list[Shape]:
    """The output line as far as its last tap, and the dots where it branches."""
    out: list[Shape] = []
    for k, column in enumerate(place.taps):
        onward = goes_on or k + 1 < len(place.taps)
        if 1 + onward + len(list(column.slots)) > 2:
            out.append(Dot(column.x, 0))
    if not goes_on and (place.taps or place.block):
        # A signal that nothing reads still has a line under its name.
        end = place.taps[-1].x if place.taps else place.label_x + text_width(place.label, TEXT_SIZE)
        out.append(Wire(((place.output_x, 0), (end, 0))))
    return out


def _spreading(track: Track) -> list[Shape]:
    """One signal to one or several readers."""
    (tap,) = track.taps
    y, d = track.y, _inward(track)
    along = sorted(track.entries, key=lambda s: s.x, reverse=not track.bus.above)
    if track.text:
        near, far = track.gain_x - d * GAIN_WIDTH / 2, track.gain_x + d * GAIN_WIDTH / 2
        return [
            Wire(((tap.x, 0), (tap.x, y), (near, y)), arrow=True),
            Gain(track.gain_x, y, "right" if d > 0 else "left", track.text),
            _landing([(far, y), (along[0].x, y)], along[0], d),
        ]
    out, start = _rising(tap, track)
    for k, entry in enumerate(along):
        last = k + 1 == len(along)
        begin = [start, (tap.x, y), (entry.x, y)] if last else [(entry.x, y)]
        if not last:
            out.append(Dot(entry.x, y))
        if entry.text:
            middle = _upright_y(track)
            toward = "down" if d > 0 else "up"
            out.append(Wire((*begin, (entry.x, middle - d * GAIN_HEIGHT / 2)), arrow=True))
            out.append(Gain(entry.x, middle, toward, entry.text))
            begin = [(entry.x, middle + d * GAIN_HEIGHT / 2)]
        out.append(_landing(begin, entry, d))
    return out


def _gathering(track: Track) -> list[Shape]:
    """Several signals, added on the way, to one reader."""
    (entry,) = track.entries
    y, d = track.y, _inward(track)
    out: list[Shape] = []
    begin: list[Point] = []
    sign = ""
    for tap in sorted(track.taps, key=lambda s: s.x, reverse=not track.bus.above):
        shapes, start = _rising(tap, track)
        out += shapes
        if begin:
            out.append(Wire((*begin, (tap.x - d * SUM_RADIUS, y)), arrow=True))
            out.append(Wire((start, (tap.x, y + d * SUM_RADIUS)), arrow=True))
            out.append(Sum(tap.x, y))
            out.append(_beside(tap.x, y, "left" if d > 0 else "right", sign))
            out.append(_beside(tap.x, y, "below" if d > 0 else "above", _carries(tap)))
            begin, sign = [(tap.x + d * SUM_RADIUS, y)], "+"
        else:
            begin, sign = [start, (tap.x, y)], _carries(tap)
    out.append(_landing([*begin, (entry.x, y)], entry, d))
    return out


def _rising(tap: Slot, track: Track) -> tuple[list[Shape], Point]:
    """From the path through the gain box of a tap, if it has one, and where that ends."""
    if not tap.text:
        return [], (tap.x, 0)
    d, middle = _inward(track), _upright_y(track)
    return [
        Wire(((tap.x, 0), (tap.x, middle + d * GAIN_HEIGHT / 2)), arrow=True),
        Gain(tap.x, middle, "up" if d > 0 else "down", tap.text),
    ], (tap.x, middle - d * GAIN_HEIGHT / 2)


def _landing(points: list[Point], entry: Slot, d: int) -> Wire:
    """The last wire of a bus, down or up to the path."""
    if entry.circle:
        return Wire((*points, (entry.x, -d * SUM_RADIUS)), arrow=True)
    return Wire((*points, (entry.x, 0)))


def _inward(track: Track) -> int:
    """Direction of y from the bus to the path; along x it is the direction of the signal."""
    return 1 if track.bus.above else -1


def _upright_y(track: Track) -> float:
    """Middle of the upright gain boxes of a bus."""
    return track.y + _inward(track) * (SUM_RADIUS + LEAD + GAIN_HEIGHT / 2)


def _carries(slot: Slot) -> str:
    """Sign of what comes through a slot; a whole bus has its signs at its own circles."""
    return _sign(slot.link.weight) if slot.link else "+"


def _sign(weight: float) -> str:
    return "−" if weight < 0 else "+"


def _beside(x: float, y: float, side: str, sign: str) -> Label:
    """The sign at one input of a summing circle."""
    dx, dy = {
        "left": (-SUM_RADIUS - 11, -4),
        "right": (SUM_RADIUS + 11, 13),
        "above": (11, -SUM_RADIUS - 3),
        "below": (11, SUM_RADIUS + 12),
    }[side]
    return Label(x + dx, y + dy, sign, "middle")
