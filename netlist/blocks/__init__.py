"""Block diagrams: a `BlockGraph` as a picture a control engineer reads.

Signals flow to the right along a straight path of gains, summing circles and integrators;
what goes forward past a neighbour runs above the path, what goes back runs below it.  Where
one signal alone leads on, as between the sections of a cascade, the path may continue in a
row of its own.  The diagram shows the graph as it is: signals of the mathematics, before any
thought of inverting amplifiers.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations, pairwise

from netlist.blocks.draw import row_shapes
from netlist.blocks.order import carried, ordered, sections
from netlist.blocks.row import Row, laid_out
from netlist.blocks.shapes import Label, Shape, Terminal, Wire, document, moved
from netlist.svg import text_width
from synth.graph import INPUT, BlockGraph

__all__ = ["draw_blocks"]

WIDEST_ROW = 1500.0  # px; a longer path is cut where it can be
_MARGIN = 24.0
_ROW_GAP = 28.0
_NOTE = "Gains ahead of 1/s are in 1/s. A path without a box has a gain of 1."


def draw_blocks(
    graph: BlockGraph, *, title: str = "", input_label: str = "u", output_label: str = "y"
) -> str:
    """The block diagram of a graph as SVG text; equal graphs give equal bytes.

    Parameters
    ----------
    graph
        Weights into integrators in 1/s; shown with four digits.
    title
        Set above the diagram, if any.
    input_label, output_label
        Names at the two ends.
    """
    rows = _rows(graph)
    left = _MARGIN + text_width(input_label, 12) + 10
    shapes: list[Shape] = []
    y = _MARGIN + (24 if title else 0)
    if title:
        shapes.append(Label(_MARGIN, _MARGIN + 10, title, kind="title", size=15))
    exit_point = (0.0, 0.0)
    widest = 0.0
    for number, row in enumerate(rows):
        y -= row.top
        shapes += [moved(s, left, y) for s in row_shapes(row)]
        if number:
            channel = y + row.top - _ROW_GAP / 2
            shapes.append(Wire((exit_point, (exit_point[0], channel), (left, channel), (left, y))))
        else:
            shapes.append(Terminal(left, y))
            shapes.append(Label(left - 9, y + 4, input_label, "end", kind="name"))
        exit_point = (left + row.width, y)
        widest = max(widest, exit_point[0])
        y += row.bottom + _ROW_GAP
    shapes.append(Terminal(*exit_point))
    shapes.append(Label(exit_point[0] + 9, exit_point[1] + 4, output_label, kind="name"))
    shapes.append(Label(_MARGIN, y + 4, _NOTE, kind="note", size=11))
    right = max(
        exit_point[0] + 9 + text_width(output_label, 12),
        widest,
        _MARGIN + text_width(_NOTE, 11),
        _MARGIN + text_width(title, 15),
    )
    return document(
        shapes,
        width=right + _MARGIN,
        height=y + 4 + _MARGIN / 2,
        description=title or f"Block diagram, {graph.form} form",
    )


def _rows(graph: BlockGraph) -> list[Row]:
    """As few rows as keep each below the widest, of even width."""
    order = ordered(graph)
    ends = [0]
    for section in sections(graph, order):
        ends.append(ends[-1] + len(section))
    made: dict[tuple[int, int], Row] = {}

    def between(start: int, end: int) -> Row:
        if (start, end) not in made:
            source = carried(graph, order, start) if start else INPUT
            blocks = [graph.by_name[name] for name in order[start:end]]
            leaves = carried(graph, order, end)
            made[start, end] = laid_out(source, blocks, leaves, named=source if start else "")
        return made[start, end]

    best: list[Row] = []
    for count in range(1, len(ends)):
        choices = [
            [between(a, b) for a, b in _pairs((0, *cuts, len(order)))]
            for cuts in combinations(ends[1:-1], count - 1)
        ]
        best = min(choices, key=lambda rows: (_widest(rows) // 60, [-r.width for r in rows]))
        if _widest(best) <= WIDEST_ROW:
            break
    return best


def _widest(rows: list[Row]) -> float:
    return max(row.width for row in rows)


def _pairs(ends: Sequence[int]) -> list[tuple[int, int]]:
    return list(pairwise(ends))
