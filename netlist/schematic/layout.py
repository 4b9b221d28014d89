"""Where everything stands.

Columns and rows share one grid: all summing buses of a column lie on one vertical, all outputs
of a row on one horizontal line.  Left of the bus of column k, from right to left: resistors,
flags, the tracks of vertical channel k, the outlets of column k - 1.

A wire within one row runs just below the cells it passes; one between two rows runs below
everything in the upper row.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from netlist.schematic import lettering
from netlist.schematic.connections import BOARD_INPUT, Connections, Reader
from netlist.schematic.geometry import Point, flag_length
from netlist.schematic.links import NetLinks, choose_links
from netlist.schematic.outlets import Outlet, measure_outlet
from netlist.schematic.placement import Placement
from netlist.schematic.stages import PITCH, STAGES, TEE, balance_length, branch_length
from netlist.schematic.tracks import Tracks, Vertical, lay_tracks

__all__ = ["Layout", "lay_out"]

TRACK = 10.0
_SMALL = 8.0
_CLEAR = 4.0  # between a cell and the wire below it


@dataclass(frozen=True)
class Layout:
    """A circuit with a place for everything.

    Parameters
    ----------
    buses
        x of the summing bus of each column [px].
    channels
        x of the first track of each vertical channel [px]; the last lies right of all columns.
    lines
        y of the output line of each row [px].
    strips
        y of the horizontal track of each net that has one [px].
    lead
        Length of an input resistor with its leads [px].
    """

    connections: Connections
    placement: Placement
    links: dict[str, NetLinks]
    tracks: Tracks
    outlets: dict[int, Outlet]
    buses: tuple[float, ...]
    channels: tuple[float, ...]
    lines: tuple[float, ...]
    strips: dict[str, float]
    lead: float

    def track_x(self, vertical: Vertical) -> float:
        """x of a vertical wire [px]."""
        return self.channels[vertical.channel] + TRACK * vertical.slot

    def row_end(self, channel: int) -> float:
        """x right of the tracks of a vertical channel, where a port may stand [px]."""
        return self.channels[channel] + TRACK * self.tracks.slots(channel) + TRACK

    def reader_at(self, reader: Reader) -> Point:
        """Left end of an input resistor."""
        row, column = self.placement.at(reader.cell)
        k = self.tracks.stacks[reader.cell].index(reader.ref)
        return self.buses[column] - self.lead, self.lines[row] + PITCH * k

    def outlet_at(self, driver: int) -> Point:
        """Start of the outlet of a cell or of the board's input."""
        row, column = self.placement.at(driver)
        return (self.buses[column] + TEE if column >= 0 else 0.0), self.lines[row]


def lay_out(connections: Connections, placement: Placement) -> Layout:
    """A place for everything, for given rows of cells."""
    circuit = connections.circuit
    links = choose_links(connections, placement)
    tracks = lay_tracks(connections, placement, links)
    outlets = _outlets(connections, placement, links)
    lead = max(
        *(branch_length(branch) for branch in circuit.branches()),
        *(balance_length(circuit, cell) for cell in circuit.cells),
    )
    flags = _flag_widths(connections, placement, links)
    buses, channels = _columns(placement, tracks, outlets, flags, lead)
    reach = _Reach(connections, placement, outlets)
    lines, strips = _rows(reach, tracks, channels)
    return Layout(
        connections, placement, links, tracks, outlets, buses, channels, lines, strips, lead
    )


def _outlets(
    connections: Connections, placement: Placement, links: dict[str, NetLinks]
) -> dict[int, Outlet]:
    cells = connections.circuit.cells
    outlets: dict[int, Outlet] = {}
    for driver in range(BOARD_INPUT, len(cells)):
        row, column = placement.at(driver)
        closes = column == len(placement.rows[row]) - 1
        caption = 0.0
        if driver != BOARD_INPUT:
            caption = STAGES[cells[driver].kind].right(cells[driver]) - TEE
        net = connections.signal_of(driver).net
        outlets[driver] = measure_outlet(
            connections, links[net], driver, closes=closes, caption=caption
        )
    return outlets


def _flag_widths(
    connections: Connections, placement: Placement, links: dict[str, NetLinks]
) -> list[float]:
    """Room for the flags of each column [px]."""
    flags = [0.0] * placement.columns
    for each in links.values():
        ref = lettering.width(connections.driver_ref(each.signal), _SMALL)
        for link in each.flagged:
            column = placement.at(link.reader.cell)[1]
            flags[column] = max(flags[column], flag_length(link.net) + ref + 10)
    return flags


def _columns(
    placement: Placement,
    tracks: Tracks,
    outlets: dict[int, Outlet],
    flags: list[float],
    lead: float,
) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """x of the buses and of the first tracks."""
    buses: list[float] = []
    channels: list[float] = []
    edge = 0.0
    for k in range(placement.columns + 1):
        widths = [o.width for d, o in outlets.items() if placement.at(d)[1] == k - 1]
        channels.append(edge + max(widths, default=0.0) + TRACK)
        if k < placement.columns:
            right = channels[k] + TRACK * tracks.slots(k)
            buses.append(_grid(right + flags[k]) + lead)
            edge = buses[k] + TEE
    return tuple(buses), tuple(channels)


@dataclass(frozen=True)
class _Reach:
    """How far cells and their outlets reach above and below their line [px]."""

    connections: Connections
    placement: Placement
    outlets: dict[int, Outlet]

    def above(self, row: int) -> float:
        """Of a whole row."""
        cells = self.connections.circuit.cells
        return max(STAGES[cells[k].kind].above for k in self.placement.rows[row])

    def below(self, row: int) -> float:
        """Of a whole row."""
        entrance = self.outlets[BOARD_INPUT].below if row == 0 else 0.0
        return max(entrance, self.below_columns(row, 0, self.placement.columns))

    def below_columns(self, row: int, first: int, last: int) -> float:
        """Of the columns from `first` to before `last`."""
        cells = self.connections.circuit.cells
        chosen = self.placement.rows[row][first:last]
        stages = [STAGES[cells[k].kind].below(cells[k]) for k in chosen]
        return max([0.0, *stages, *(self.outlets[k].below for k in chosen)])


def _rows(
    reach: _Reach, tracks: Tracks, channels: tuple[float, ...]
) -> tuple[tuple[float, ...], dict[str, float]]:
    """y of the output lines and of the horizontal tracks."""
    lines: list[float] = []
    strips: dict[str, float] = {}
    edge = 0.0
    for row in range(len(reach.placement.rows)):
        edge = _place_strips(tracks.ranks.get(row, []), tracks, channels, edge, strips)
        line = _grid(edge + reach.above(row))
        lines.append(line)
        edge = _grid(line + reach.below(row))
        taken: list[tuple[float, float, float]] = []
        for net in tracks.ranks.get(row + 1, []):
            if not tracks.within_row(net):
                continue
            first, last = tracks.span(net)
            low, high = _interval(net, tracks, channels)
            y = _grid(line + reach.below_columns(row, first, last) + _CLEAR)
            y = max([y, *(c + TRACK for a, b, c in taken if a < high and low < b)])
            # Never at the height of a resistor, whose lead could lie in the way.
            y += TRACK if (y - line) % PITCH == 0 else 0.0
            taken.append((low, high, y))
            strips[net] = y
        edge = max([edge, *(y for _, _, y in taken)])
    _place_strips(tracks.ranks.get(len(lines), []), tracks, channels, edge, strips)
    return tuple(lines), strips


def _place_strips(
    nets: list[str],
    tracks: Tracks,
    channels: tuple[float, ...],
    edge: float,
    strips: dict[str, float],
) -> float:
    """Tracks of nets between two rows below `edge`, each the first with room for it.

    Fills `strips`; returns where they end.
    """
    taken: list[list[tuple[float, float]]] = []
    for net in nets:
        if tracks.within_row(net):
            continue
        low, high = _interval(net, tracks, channels)
        free = (all(high <= a or b <= low for a, b in spans) for spans in taken)
        k = next((k for k, is_free in enumerate(free) if is_free), len(taken))
        if k == len(taken):
            taken.append([])
        taken[k].append((low, high))
        strips[net] = edge + TRACK * (k + 1)
    return edge + TRACK * (len(taken) + 1)


def _interval(net: str, tracks: Tracks, channels: tuple[float, ...]) -> tuple[float, float]:
    """What a net's horizontal track takes up, with room at both ends."""
    xs = [channels[v.channel] + TRACK * v.slot for v in tracks.of(net)]
    return min(xs) - TRACK, max(xs) + TRACK


def _grid(value: float) -> float:
    """The next multiple of ten."""
    return 10.0 * math.ceil(value / 10)
