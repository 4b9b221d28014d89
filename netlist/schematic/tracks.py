"""Which vertical and horizontal tracks the wires take, and in which order.

Channels are free strips: vertical channel k lies left of column k, horizontal channel r above
row r.  A net in a horizontal channel has one track there, and one vertical wire in every
vertical channel where its driver or a reader stands.  The order of the verticals and of the
resistors they lead to is chosen so that wires nest instead of crossing: short tracks next to
their row; of the wires that come up from a channel, the leftmost goes to the highest resistor.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

from netlist.schematic.connections import Connections
from netlist.schematic.links import NetLinks
from netlist.schematic.placement import Placement
from synth.circuit import GROUND

__all__ = ["Tracks", "Vertical", "lay_tracks"]

Place = tuple[int, int]


@dataclass
class Vertical:
    """A vertical wire of a net in vertical channel `channel` beside row `row`.

    `from_left` says that its net comes along the horizontal channel from the left, `source`
    that the driver's output line ends on it, `readers` are the resistors right of
    it; it runs up to horizontal channel `row` or down to channel `row` + 1 or neither.
    """

    net: str
    row: int
    channel: int
    from_left: bool = False
    source: bool = False
    readers: list[str] = field(default_factory=list)
    up: bool = False
    down: bool = False
    slot: int = 0


@dataclass(frozen=True)
class Tracks:
    """The order of everything.

    Parameters
    ----------
    verticals
        By row and channel, from left to right.
    ranks
        Nets of each horizontal channel, from top to bottom.
    stacks
        Input resistors of each cell, from top to bottom.
    """

    verticals: dict[Place, list[Vertical]]
    ranks: dict[int, list[str]]
    stacks: dict[int, list[str]]

    def slots(self, channel: int) -> int:
        """Number of vertical tracks in a channel."""
        used = [
            v.slot + 1 for (_, k), group in self.verticals.items() if k == channel for v in group
        ]
        return max(used, default=0)

    def of(self, net: str) -> list[Vertical]:
        """The vertical wires of a net."""
        return [v for group in self.verticals.values() for v in group if v.net == net]

    def span(self, net: str) -> tuple[int, int]:
        """First and last vertical channel of a net."""
        channels = [v.channel for v in self.of(net)]
        return min(channels), max(channels)

    def within_row(self, net: str) -> bool:
        """Whether a net stays beside one row."""
        return len({v.row for v in self.of(net)}) == 1

    def vertical(self, net: str, row: int, channel: int) -> Vertical | None:
        """The vertical wire of a net at a place."""
        group = self.verticals.get((row, channel), [])
        return next((v for v in group if v.net == net), None)


def lay_tracks(
    connections: Connections, placement: Placement, links: dict[str, NetLinks]
) -> Tracks:
    """The tracks of all wired nets."""
    groups: dict[Place, list[Vertical]] = {}
    for each in links.values():
        for vertical in _verticals(placement, each):
            groups.setdefault((vertical.row, vertical.channel), []).append(vertical)
    spans = _spans(links, groups.values())
    ranks = _ranks(placement, links, spans)
    for place, group in groups.items():
        for v in group:
            v.from_left = v.net in spans and spans[v.net][0] < v.channel
        groups[place] = _in_order(group, ranks)
    _number_slots(groups)
    _align(groups)
    stacks = {
        k: _stack(connections, links, groups.get(placement.at(k), []), k)
        for k in range(len(connections.circuit.cells))
    }
    return Tracks(groups, ranks, stacks)


def _verticals(placement: Placement, links: NetLinks) -> Iterable[Vertical]:
    """The vertical wires of one net."""
    net, channel = links.signal.net, links.channel
    row, column = placement.at(links.signal.driver)
    made: dict[Place, Vertical] = {}

    def at(r: int, k: int) -> Vertical:
        return made.setdefault((r, k), Vertical(net, r, k))

    for link in links.links:
        if link.how == "beside":
            at(row, column + 1).source = True
            at(row, column + 1).readers.append(link.reader.ref)
    if channel is not None:
        at(row, column + 1).source = True
        for link in links.wired:
            at(*placement.at(link.reader.cell)).readers.append(link.reader.ref)
        for vertical in made.values():
            vertical.up = channel == vertical.row
            vertical.down = channel == vertical.row + 1
    return made.values()


def _spans(
    links: dict[str, NetLinks], groups: Iterable[list[Vertical]]
) -> dict[str, tuple[int, int]]:
    """First and last vertical channel each net in a horizontal channel touches."""
    touched: dict[str, list[int]] = {}
    for group in groups:
        for v in group:
            if links[v.net].channel is not None:
                touched.setdefault(v.net, []).append(v.channel)
    return {net: (min(ks), max(ks)) for net, ks in touched.items()}


def _ranks(
    placement: Placement, links: dict[str, NetLinks], spans: dict[str, tuple[int, int]]
) -> dict[int, list[str]]:
    """Nets of each horizontal channel from top to bottom.

    First those of the row above alone, the shortest next to it; then those of both rows.
    """
    ranks: dict[int, list[str]] = {}
    for net in spans:
        channel = links[net].channel
        if channel is not None:
            ranks.setdefault(channel, []).append(net)

    def key(net: str) -> tuple[bool, int, int]:
        rows = {placement.at(k.reader.cell)[0] for k in links[net].wired}
        home = placement.at(links[net].signal.driver)[0]
        first, last = spans[net]
        return rows != {home}, last - first, first

    return {channel: sorted(nets, key=key) for channel, nets in ranks.items()}


def _in_order(group: list[Vertical], ranks: dict[int, list[str]]) -> list[Vertical]:
    """Verticals of one place from left to right."""

    def key(v: Vertical) -> tuple[int, int, int]:
        if v.source:
            return 0, 0, 0
        rank = ranks[v.row if v.up else v.row + 1].index(v.net)
        closeness = -rank if v.up else rank  # grows away from the row
        side = (0, closeness) if v.from_left else (1, -closeness)
        return 1 if v.up else 2, *side

    return sorted(group, key=key)


def _number_slots(groups: dict[Place, list[Vertical]]) -> None:
    """Slots from left to right, none shared with another net in the same horizontal channel."""
    for (row, channel), group in sorted(groups.items()):
        above = groups.get((row - 1, channel), [])
        taken = {v.slot: v.net for v in above if v.down}
        slot = 0
        for v in group:
            while v.up and taken.get(slot, v.net) != v.net:
                slot += 1
            v.slot = slot
            slot += 1


def _align(groups: dict[Place, list[Vertical]]) -> None:
    """Move a vertical beside one row to the slot of the same net beside the next, if it can."""
    for (row, channel), group in groups.items():
        for upper in group:
            lower_group = groups.get((row + 1, channel), [])
            lower = next((v for v in lower_group if v.net == upper.net and v.up), None)
            if lower is None or not upper.down or lower.slot == upper.slot:
                continue
            moving, still, around = (
                (upper, lower, group) if upper.slot < lower.slot else (lower, upper, lower_group)
            )
            between = range(moving.slot + 1, still.slot + 1)
            if not any(v.slot in between for v in around):
                moving.slot = still.slot


def _stack(
    connections: Connections, links: dict[str, NetLinks], group: list[Vertical], cell: int
) -> list[str]:
    """Input resistors of a cell from top to bottom; `group` are the verticals beside it.

    Wires that come up from the left pass below the left-hand neighbour only, so their resistors
    stand high; those that come from the right pass below the cell itself.  Below the first, which
    lies on the line of the output, resistors into the other input of an op-amp stand lowest.
    """
    hows = {
        k.reader.ref: k.how for each in links.values() for k in each.links if k.reader.cell == cell
    }
    readers = [v for v in group if not v.source]
    circuit = connections.circuit
    inputs, other = circuit.cells[cell].inputs, circuit.cells[cell].plus
    order = [
        *(ref for ref in inputs if hows[ref] == "straight"),
        *(ref for ref in inputs if hows[ref] == "beside"),
        *(ref for v in reversed(readers) if v.up for ref in v.readers),
        *(ref for v in readers if v.down and v.from_left for ref in v.readers),
        *(ref for ref in inputs if hows[ref] == "flag"),
        *(ref for v in readers if v.down and not v.from_left for ref in v.readers),
    ]
    lower = [r for r in order[1:] if other != GROUND and other in circuit.by_ref[r].nets]
    return [*order[:1], *(r for r in order[1:] if r not in lower), *lower]
