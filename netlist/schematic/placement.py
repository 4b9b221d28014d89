"""Cells in rows, read like text: left to right, row after row.

Within a row every output lies on one line, so that a cell which feeds its right-hand neighbour
does so straight.  Rows are broken where few connections cross the break.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

from netlist.schematic.connections import BOARD_INPUT, Connections

__all__ = ["Placement", "place"]

_RAGGED = 0.35  # cost of one empty place squared, against one connection across a break


@dataclass(frozen=True)
class Placement:
    """Rows of cells, each a tuple of cell numbers from left to right."""

    rows: tuple[tuple[int, ...], ...]

    @property
    def columns(self) -> int:
        """Cells in the longest row."""
        return max(len(row) for row in self.rows)

    def at(self, cell: int) -> tuple[int, int]:
        """Row and column of a cell; the board's input stands left of the first."""
        return self._places[cell]

    @cached_property
    def _places(self) -> dict[int, tuple[int, int]]:
        places = {k: (r, c) for r, row in enumerate(self.rows) for c, k in enumerate(row)}
        return {BOARD_INPUT: (0, -1), **places}


def place(connections: Connections, columns: int) -> Placement:
    """Rows of at most `columns` cells in the circuit's order, with the cheapest breaks."""
    n = len(connections.circuit.cells)
    crossing = [0.0] * (n + 1)
    for signal in connections.signals.values():
        for reader in signal.readers:
            ends = sorted((signal.driver + 1, reader.cell + 1))
            # A break before cell k parts the places up to k from those behind.
            for k in range(ends[0] + 1, ends[1] + 1):
                crossing[k - 1] += 1
    cost: list[float] = [0.0]
    breaks: list[int] = [0]
    for end in range(1, n + 1):
        options = []
        for start in range(max(0, end - columns), end):
            ragged = 0.0 if end == n else _RAGGED * (columns - (end - start)) ** 2
            options.append((cost[start] + ragged + (crossing[start] if start else 0.0), start))
        best, start = min(options)
        cost.append(best)
        breaks.append(start)
    rows: list[tuple[int, ...]] = []
    end = n
    while end:
        rows.append(tuple(range(breaks[end], end)))
        end = breaks[end]
    return Placement(tuple(reversed(rows)))
