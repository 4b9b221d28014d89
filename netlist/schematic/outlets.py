"""What stands at an output: the net's name, a flag for what goes by name, the load, the port.

An outlet starts where the feedback meets the output, or at the board's input, and runs to the
right along the output line.
"""

from __future__ import annotations

from dataclasses import dataclass

from netlist.schematic import lettering
from netlist.schematic.connections import BOARD_INPUT, Connections
from netlist.schematic.geometry import Box, Flag, Sheet, Symbol, Text, flag_length
from netlist.schematic.links import NetLinks
from netlist.schematic.stages import draw_ground, draw_resistor, resistor_length
from synth.circuit import GROUND, Passive

__all__ = ["Outlet", "measure_outlet"]

_GAP = 10.0
_POLE = 20.0  # how high a flag stands
_SMALL = 8.0
_LINE = 10.0
_LOAD = 60.0  # length of an upright load with its leads


@dataclass(frozen=True)
class Outlet:
    """The outlet of one driver.

    Parameters
    ----------
    net
        What it carries.
    flag
        Whether its name stands on a pole, for readers that go by name or as a port in the
        middle of a row.
    port
        Whether it is the circuit's output.
    closes
        Whether it is the last of its row, where a port may stand in line.
    readers
        Op-amps that read it by name, in lines.
    """

    net: str
    flag: bool
    port: bool
    closes: bool
    readers: tuple[str, ...]
    loads: tuple[Passive, ...]
    source: Passive | None
    source_net: str
    caption: float

    @property
    def name_start(self) -> float:
        """Where the name stands, from the start of the outlet [px]."""
        if not self.source_net:
            return _GAP
        start = flag_length(self.source_net, port=True)
        if self.source is not None:
            start += 10 + resistor_length(self.source)
        return start + _GAP

    @property
    def in_line(self) -> bool:
        """Whether a port stands in line at the end of the row."""
        return self.port and self.closes

    @property
    def _list_start(self) -> float:
        return max(self.name_start, self.caption + _GAP)

    @property
    def _name_end(self) -> float:
        """End of the name and of the list of readers."""
        end = self.name_start
        if self.flag:
            end += flag_length(self.net, port=self.port)
        elif not self.port and self.net != self.source_net:
            end += lettering.width(self.net, 10.0)
        lists = [lettering.width(t, _SMALL) for t in self.readers]
        return max(end, self._list_start + max(lists, default=0.0))

    @property
    def _load_places(self) -> list[tuple[Passive, float]]:
        """Loads and where they hang, from the start of the outlet [px]."""
        places: list[tuple[Passive, float]] = []
        end = max(self._name_end, self.caption)
        for load in self.loads:
            at = 5.0 * (int(end / 5) + 3)
            places.append((load, at))
            end = at + _load_width(load)
        return places

    @property
    def width(self) -> float:
        """How far it reaches to the right of its start, a whole number of tens [px]."""
        end = max(self._name_end, self.caption)
        for load, at in self._load_places:
            end = at + _load_width(load)
        return 10.0 * (int((end + 4) / 10) + 1)

    @property
    def below(self) -> float:
        """How far it reaches below the output line [px]."""
        lists = 6 + _LINE * len(self.readers) if self.readers else 0.0
        return max(lists, _LOAD + 16 if self.loads else 0.0)

    @property
    def line_start(self) -> float:
        """Where the output line begins, from the start of the outlet [px]."""
        return self.name_start - _GAP if self.source_net else 0.0

    @property
    def line_end(self) -> float:
        """Where the output line must at least reach, from the start of the outlet [px]."""
        ends = [at for _, at in self._load_places]
        return max([*ends, self.name_start if self.flag else 0.0])

    def draw(self, sheet: Sheet, x: float, y: float) -> None:
        """The outlet with its start at (x, y), but for the output line itself."""
        if self.source_net:
            self._draw_input(sheet, x, y)
        start = x + self.name_start
        if self.flag:
            sheet.wire(self.net, (start, y), (start, y - _POLE))
            sheet.flags.append(Flag(self.net, (start, y - _POLE), leaving=True, port=self.port))
        elif not self.port and self.net != self.source_net:
            sheet.texts.append(Text((start, y - 5), self.net, tone="accent"))
        for k, line in enumerate(self.readers):
            at = (x + self._list_start, y + 12 + _LINE * k)
            sheet.texts.append(Text(at, line, _SMALL, tone="faint"))
        for load, offset in self._load_places:
            _draw_load(sheet, load, self.net, x + offset, y)

    def _draw_input(self, sheet: Sheet, x: float, y: float) -> None:
        """The input's port and the source resistor behind it."""
        tip = x + flag_length(self.source_net, port=True)
        sheet.flags.append(Flag(self.source_net, (tip, y), port=True))
        if self.source is not None:
            sheet.wire(self.source_net, (tip, y), (tip + 10, y), heavy=True)
            nets = (self.source_net, self.net)
            length = resistor_length(self.source)
            draw_resistor(sheet, self.source, (tip + 10, y), length, nets, heavy=True)


def measure_outlet(
    connections: Connections, links: NetLinks, driver: int, *, closes: bool, caption: float
) -> Outlet:
    """The outlet of a cell or of the board's input.

    `closes` says that it is the last of its row; `caption` is where the caption of its cell
    ends, from the start of the outlet [px].
    """
    cells = connections.circuit.cells
    net = links.signal.net
    port = driver == connections.output_cell
    named = list(dict.fromkeys(cells[k.reader.cell].amplifier for k in links.flagged))
    entrance = driver == BOARD_INPUT
    source_net = connections.circuit.input_net if entrance else ""
    own_port = (port and closes) or net == source_net
    return Outlet(
        net=net,
        flag=bool(named or port) and not own_port,
        port=port,
        closes=closes,
        readers=tuple(_lines(named)),
        loads=connections.loads if port else (),
        source=connections.source if entrance else None,
        source_net=source_net,
        caption=caption,
    )


def _lines(refs: list[str]) -> list[str]:
    """``to U3 U7`` in lines of three."""
    chunks = [" ".join(refs[k : k + 3]) for k in range(0, len(refs), 3)]
    return [("to " if k == 0 else "") + chunk for k, chunk in enumerate(chunks)]


def _load_width(load: Passive) -> float:
    """Room to the right of a load for its label [px]."""
    w = max(lettering.width(t, 10.0) for t in (load.ref, lettering.value_text(load)))
    return float(int(w) + 10)


def _draw_load(sheet: Sheet, load: Passive, net: str, x: float, y: float) -> None:
    """An upright resistor from the output line to ground, its label to the right."""
    middle = y + _LOAD / 2
    pins = (("1", (x, middle - 15)), ("2", (x, middle + 15)))
    box = Box(x - 5, middle - 15, x + 5, middle + 15)
    hint = f"{load.ref} {lettering.value_text(load)}, not on the board"
    sheet.symbols.append(
        Symbol("resistor", load.ref, (x, middle), box, pins, True, not load.on_board, hint=hint)
    )
    sheet.wire(net, (x, y), (x, middle - 15))
    sheet.wire(GROUND, (x, middle + 15), (x, y + _LOAD))
    draw_ground(sheet, (x, y + _LOAD))
    sheet.texts.append(Text((x + 9, middle - 2), load.ref))
    sheet.texts.append(Text((x + 9, middle + 10), lettering.value_text(load)))
