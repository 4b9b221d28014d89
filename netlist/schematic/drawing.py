"""A circuit on one sheet: every number of columns is tried, the best sheet is kept.

Best is large in print, with few rows and few connections that go by name.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

from netlist.schematic.connections import read_connections
from netlist.schematic.geometry import Box, Rule, Sheet
from netlist.schematic.layout import Layout, lay_out
from netlist.schematic.notes import NOTES_WIDTH, Notes
from netlist.schematic.placement import place
from netlist.schematic.routing import draw_layout
from netlist.schematic.svg import READABLE, print_scale, sheet_svg
from synth.circuit import Circuit

__all__ = ["Drawing", "compose", "draw_schematic"]

_MARGIN, _FRAME = 30.0, 10.0
_FLAG_COST, _ROW_COST = 0.03, 0.03
_STRAIN = 3.0  # how much more it costs to print letters smaller than can be read with ease
_MOST_COLUMNS = 8


@dataclass(frozen=True)
class Drawing:
    """A finished sheet with its size [px] and the layout it came from."""

    sheet: Sheet
    width: float
    height: float
    layout: Layout


def draw_schematic(
    circuit: Circuit,
    *,
    title: str,
    supply: tuple[float, float] = (-12.0, 12.0),
    subtitle: str = "",
) -> str:
    """The schematic of a circuit made of cells, as SVG text, the same bytes every time.

    Parameters
    ----------
    supply
        Negative and positive rail [V], for the note in the corner.

    Raises
    ------
    CircuitError
        A circuit that is not made of cells: no cells, parts outside them, a net nothing drives.
    """
    drawing = compose(circuit, title=title, supply=supply, subtitle=subtitle)
    return sheet_svg(drawing.sheet, width=drawing.width, height=drawing.height, title=title)


def compose(circuit: Circuit, *, title: str, supply: tuple[float, float], subtitle: str) -> Drawing:
    """The best sheet for a circuit, as geometry."""
    connections = read_connections(circuit)
    most = min(len(circuit.cells), _MOST_COLUMNS)
    placements = dict.fromkeys(place(connections, n) for n in range(1, most + 1))
    drafts: list[_Draft] = []
    for placement in placements:
        layout = lay_out(connections, placement)
        notes = Notes(
            connections,
            title=title,
            subtitle=subtitle,
            supply=supply,
            flagged=any(each.flagged for each in layout.links.values()),
        )
        drafts.append(_draft(layout, notes))
    return min(drafts, key=lambda d: d.cost).finished()


@dataclass(frozen=True)
class _Draft:
    """A drawing with its notes; `box` is what everything takes up, on the grid."""

    layout: Layout
    sheet: Sheet
    box: Box

    @property
    def width(self) -> float:
        return self.box.right - self.box.left + 2 * _MARGIN

    @property
    def height(self) -> float:
        return self.box.bottom - self.box.top + 2 * _MARGIN

    @property
    def cost(self) -> float:
        """Smaller is better."""
        flags = sum(len(each.flagged) for each in self.layout.links.values())
        scale = print_scale(self.width, self.height)
        size = -math.log(scale) + _STRAIN * max(0.0, math.log(READABLE / scale))
        return size + _FLAG_COST * flags + _ROW_COST * len(self.layout.placement.rows)

    def finished(self) -> Drawing:
        """Moved to its margins, with a frame around everything."""
        sheet = self.sheet.shifted(_MARGIN - self.box.left, _MARGIN - self.box.top)
        left, top, right, bottom = _FRAME, _FRAME, self.width - _FRAME, self.height - _FRAME
        corners = [(left, top), (right, top), (right, bottom), (left, bottom), (left, top)]
        sheet.rules += [Rule(a, b) for a, b in pairwise(corners)]
        return Drawing(sheet, self.width, self.height, self.layout)


def _draft(layout: Layout, notes: Notes) -> _Draft:
    """The layout drawn, with its notes in the bottom right corner."""
    sheet = draw_layout(layout)
    e = sheet.extent
    left, right = 10.0 * math.floor(e.left / 10), 10.0 * math.ceil(e.right / 10)
    missing = max(0.0, NOTES_WIDTH - (right - left))
    left -= 10.0 * math.ceil(missing / 20)
    right = max(right, left + NOTES_WIDTH)
    top = _free_top(sheet, notes, right - NOTES_WIDTH)
    notes.draw(sheet, right - NOTES_WIDTH, top)
    bottom = 10.0 * math.ceil(max(e.bottom, top + notes.height) / 10)
    return _Draft(layout, sheet, Box(left, 10.0 * math.floor(e.top / 10), right, bottom))


def _free_top(sheet: Sheet, notes: Notes, left: float) -> float:
    """The highest place for the notes right of `left` from which nothing lies in their way."""
    top = sheet.extent.bottom - notes.height
    gap = 20.0
    blocking = [
        b.bottom + gap for b in sheet.boxes() if b.right > left - gap and b.bottom + gap > top
    ]
    return 10.0 * math.ceil(max([top, *blocking]) / 10)
