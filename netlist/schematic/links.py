"""What is drawn as a wire and what goes by name.

A cell that feeds its right-hand neighbour does so straight.  Other short connections run in
the channels between the cells: down or up beside the driver, along the channel under its row
(over it, for a reader in the row above), and to the reader.  A long connection would only
confuse; it gets a flag with the net's name at both ends.  On a small sheet nothing is long.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from netlist.schematic.connections import BOARD_INPUT, Connections, Reader, Signal
from netlist.schematic.placement import Placement

__all__ = ["Link", "NetLinks", "choose_links"]

_SMALL = 7  # cells up to which every connection is a wire where rows are neighbours
_DEEP = 6  # inputs of a cell below which a wire may still run on a larger sheet
_NEAR = 3  # columns a wire may run on a larger sheet


@dataclass(frozen=True)
class Link:
    """One reader of a net: `how` is straight, beside, wire or flag.

    ``beside`` is a second resistor of the right-hand neighbour.
    """

    net: str
    reader: Reader
    how: str


@dataclass(frozen=True)
class NetLinks:
    """All readers of a net; `channel` is the horizontal channel its wires use, if they do.

    Channel r lies above row r.
    """

    signal: Signal
    links: tuple[Link, ...]
    channel: int | None

    @property
    def flagged(self) -> tuple[Link, ...]:
        """Those that go by name."""
        return tuple(k for k in self.links if k.how == "flag")

    @property
    def wired(self) -> tuple[Link, ...]:
        """Those that use the channel."""
        return tuple(k for k in self.links if k.how == "wire")


def choose_links(connections: Connections, placement: Placement) -> dict[str, NetLinks]:
    """Every net with the way each of its readers is reached."""
    return {
        net: _net_links(connections, placement, signal)
        for net, signal in connections.signals.items()
    }


def _net_links(connections: Connections, placement: Placement, signal: Signal) -> NetLinks:
    row, column = placement.at(signal.driver)
    ways: dict[Reader, str] = {}
    wanted: list[Reader] = []
    for reader in signal.readers:
        place = placement.at(reader.cell)
        if place == (row, column + 1) and not _behind_source(connections, signal):
            ways[reader] = "straight" if "straight" not in _ways_of(ways, reader.cell) else "beside"
        elif _is_short(connections, placement, signal, reader):
            wanted.append(reader)
        else:
            ways[reader] = "flag"
    channel, reached = _channel(placement, row, wanted)
    ways |= {reader: "wire" if reader in reached else "flag" for reader in wanted}
    links = tuple(Link(signal.net, reader, ways[reader]) for reader in signal.readers)
    return NetLinks(signal, links, channel)


def _behind_source(connections: Connections, signal: Signal) -> bool:
    """Whether a net is the port itself, with the source resistor between it and the board."""
    return signal.driver == BOARD_INPUT and signal.net != connections.entry


def _is_short(
    connections: Connections, placement: Placement, signal: Signal, reader: Reader
) -> bool:
    """Whether a connection to another than the right-hand neighbour is drawn as a wire."""
    row, column = placement.at(signal.driver)
    r, c = placement.at(reader.cell)
    if _behind_source(connections, signal) or abs(r - row) > 1:
        return False
    cells = connections.circuit.cells
    next_row = column == len(placement.rows[row]) - 1 and (r, c) == (row + 1, 0)
    if len(cells) <= _SMALL or connections.main.get(reader.cell) == reader or next_row:
        return True
    passed = placement.rows[row][min(c, column + 1) : max(c, column + 1)]
    deepest = max((len(cells[k].inputs) for k in passed), default=0)
    return r == row and abs(c - column - 1) <= _NEAR and deepest <= _DEEP


def _ways_of(ways: dict[Reader, str], cell: int) -> Iterator[str]:
    return (how for reader, how in ways.items() if reader.cell == cell)


def _channel(
    placement: Placement, row: int, wanted: list[Reader]
) -> tuple[int | None, tuple[Reader, ...]]:
    """The channel for readers in the same and in neighbouring rows, and whom it reaches."""
    rows = {reader: placement.at(reader.cell)[0] for reader in wanted}
    if not rows:
        return None, ()
    below = row + 1 in rows.values() or row - 1 not in rows.values()
    reached = (row, row + 1) if below else (row - 1, row)
    return row + 1 if below else row, tuple(r for r in wanted if rows[r] in reached)
