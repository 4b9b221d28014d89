"""A layout as a drawing: the cells at their places and the wires between them."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

from netlist.schematic.connections import BOARD_INPUT, Reader
from netlist.schematic.geometry import Flag, Sheet, Text
from netlist.schematic.layout import Layout
from netlist.schematic.links import NetLinks
from netlist.schematic.stages import STAGES
from netlist.schematic.tracks import Vertical

__all__ = ["draw_layout"]

_SMALL = 8.0


def draw_layout(layout: Layout) -> Sheet:
    """Cells, outlets, flags and wires."""
    sheet = Sheet()
    connections = layout.connections
    for k, cell in enumerate(connections.circuit.cells):
        row, column = layout.placement.at(k)
        main = connections.main.get(k)
        STAGES[cell.kind].draw(
            sheet,
            connections.circuit,
            cell,
            (layout.buses[column], layout.lines[row]),
            stack=layout.tracks.stacks[k],
            lead=layout.lead,
            main=main.ref if main else "",
        )
    for driver, outlet in layout.outlets.items():
        outlet.draw(sheet, *layout.outlet_at(driver))
    for each in layout.links.values():
        _draw_flags(sheet, layout, each)
        _NetWires(layout, each, sheet).draw()
    return sheet


def _draw_flags(sheet: Sheet, layout: Layout, links: NetLinks) -> None:
    """Flags at readers that go by name, the driver's reference before them."""
    for link in links.flagged:
        flag = Flag(link.net, layout.reader_at(link.reader))
        sheet.flags.append(flag)
        driver = layout.connections.driver_ref(links.signal)
        if driver:
            at = (flag.box.left - 3, flag.at[1] + 3)
            sheet.texts.append(Text(at, driver, _SMALL, side="end", tone="faint"))


@dataclass
class _NetWires:
    """The wires of one net outside the cells."""

    layout: Layout
    links: NetLinks
    sheet: Sheet

    def draw(self) -> None:
        layout, net, driver = self.layout, self.links.signal.net, self.links.signal.driver
        if driver == BOARD_INPUT and net != layout.connections.entry:
            return
        row, column = layout.placement.at(driver)
        main = self._main()
        home = layout.tracks.vertical(net, row, column + 1)
        self._draw_line(home, main)
        verticals = layout.tracks.of(net)
        for vertical in verticals:
            self._draw_vertical(vertical, main)
        if self.links.channel is not None and home is not None:
            y = layout.strips[net]
            xs = [layout.track_x(v) for v in verticals]
            heavy = None
            if main is not None and main in [k.reader for k in self.links.wired]:
                place = layout.placement.at(main.cell)
                end = layout.tracks.vertical(net, *place)
                heavy = (layout.track_x(home), layout.track_x(end)) if end else None
            self._pieces([(x, y) for x in xs], heavy, 0)

    def _main(self) -> Reader | None:
        """The reader on the main path, if it is wired."""
        on_path = self.layout.connections.main.values()
        return next(
            (k.reader for k in self.links.links if k.reader in on_path and k.how != "flag"), None
        )

    def _draw_line(self, home: Vertical | None, main: Reader | None) -> None:
        """The output line: to the right-hand neighbour, the vertical track, or the port."""
        layout, driver = self.layout, self.links.signal.driver
        outlet = layout.outlets[driver]
        x, y = layout.outlet_at(driver)
        start = x + outlet.line_start
        ends = [x + outlet.line_end, start]
        straight = next((k.reader for k in self.links.links if k.how == "straight"), None)
        if home is not None:
            ends.append(layout.track_x(home))
        if straight is not None:
            ends.append(layout.reader_at(straight)[0])
        if outlet.in_line:
            _, column = layout.placement.at(driver)
            port = layout.row_end(column + 1)
            self.sheet.flags.append(Flag(outlet.net, (port, y), leaving=True, port=True))
            ends.append(port)
        heavy = None
        if outlet.in_line or (main is not None and main == straight):
            heavy = (start, max(ends))
        elif main is not None and home is not None:
            heavy = (start, layout.track_x(home))
        elif outlet.port:
            heavy = (start, x + outlet.name_start)
        self._pieces([(start, y), (max(ends), y)], heavy, 0)

    def _draw_vertical(self, vertical: Vertical, main: Reader | None) -> None:
        """One vertical wire and the stubs from it to the resistors."""
        layout, net = self.layout, self.links.signal.net
        x = layout.track_x(vertical)
        line = layout.lines[vertical.row]
        readers = [k.reader for k in self.links.links if k.reader.ref in vertical.readers]
        ends = {reader: layout.reader_at(reader) for reader in readers}
        ys = [y for _, y in ends.values()]
        strip = None
        if self.links.channel is not None:
            strip = layout.strips[net]
            ys.append(strip)
        if vertical.source:
            ys.append(line)
        heavy = None
        if main in ends:
            heavy = (line if vertical.source else strip or line, ends[main][1])
        elif vertical.source and strip is not None and main in [k.reader for k in self.links.wired]:
            heavy = (line, strip)
        self._pieces([(x, y) for y in ys], heavy, 1)
        for reader, (left, y) in ends.items():
            self.sheet.wire(net, (x, y), (left, y), heavy=reader == main)

    def _pieces(
        self,
        points: list[tuple[float, float]],
        heavy: tuple[float, float] | None,
        axis: int,
    ) -> None:
        """A wire from point to point along an axis, in pieces, heavy within an interval.

        It is cut at every point, since whatever meets it there must find an end.
        """
        fixed = points[0][1 - axis]
        inner = sorted(heavy) if heavy else []
        stops = sorted({*(p[axis] for p in points), *inner})
        for a, b in pairwise(stops):
            ends = [(a, fixed), (b, fixed)] if axis == 0 else [(fixed, a), (fixed, b)]
            thick = bool(inner) and inner[0] <= a and b <= inner[1]
            self.sheet.wire(self.links.signal.net, *ends, heavy=thick)
