"""The table in the corner: title, op-amps, rails, decoupling, and how to read the drawing."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from itertools import pairwise

from netlist.schematic import lettering
from netlist.schematic.connections import Connections
from netlist.schematic.geometry import Box, Rule, Sheet, Text
from synth.circuit import Passive
from synth.quantities import show

__all__ = ["NOTES_WIDTH", "Notes"]

NOTES_WIDTH = 590.0
_LEFT = 210.0  # the cell of the title
_KEYS = 78.0  # the column of the keys
_PAD = 8.0
_TITLE, _BODY = 13.0, 9.0


class Notes:
    """The table for one circuit; `height` follows from what it has to say."""

    def __init__(
        self,
        connections: Connections,
        *,
        title: str,
        subtitle: str,
        supply: tuple[float, float],
        flagged: bool,
    ) -> None:
        inner = _LEFT - 2 * _PAD
        self._title = lettering.wrapped(title, _TITLE, inner, bold=True)
        self._subtitle = lettering.wrapped(subtitle, _BODY, inner)
        self._counts = lettering.wrapped(_counts(connections), _BODY, inner)
        room = NOTES_WIDTH - _LEFT - _KEYS - _PAD
        self._lines = [
            (key, lettering.wrapped(value, _BODY, room))
            for key, value in _entries(connections, supply, flagged)
        ]
        left = 17 * len(self._title) + 12 * (len(self._subtitle) + len(self._counts)) + 6
        right = sum(12 * len(lines) + 2 for _, lines in self._lines)
        self.height = max(left, right) + 2 * _PAD

    def draw(self, sheet: Sheet, left: float, top: float) -> None:
        """The table with its top left corner there."""
        right, bottom = left + NOTES_WIDTH, top + self.height
        middle = left + _LEFT
        corners = [(left, top), (right, top), (right, bottom), (left, bottom), (left, top)]
        sheet.rules += [Rule(a, b) for a, b in pairwise(corners)]
        sheet.rules.append(Rule((middle, top), (middle, bottom)))
        y = top + _PAD + 11
        for line in self._title:
            sheet.texts.append(Text((left + _PAD, y), line, _TITLE, bold=True))
            y += 17
        for line in self._subtitle:
            sheet.texts.append(Text((left + _PAD, y - 2), line, _BODY))
            y += 12
        for k, line in enumerate(reversed(self._counts)):
            at = (left + _PAD, bottom - _PAD - 1 - 12 * k)
            sheet.texts.append(Text(at, line, _BODY, tone="faint"))
        y = top + _PAD + 8
        for key, lines in self._lines:
            sheet.texts.append(Text((middle + _PAD, y), key, _BODY, tone="faint"))
            for line in lines:
                sheet.texts.append(Text((middle + _KEYS, y), line, _BODY))
                y += 12
            y += 2

    def box(self, left: float, top: float) -> Box:
        """The table with its top left corner there."""
        return Box(left, top, left + NOTES_WIDTH, top + self.height)


def _counts(connections: Connections) -> str:
    circuit = connections.circuit
    kinds = Counter(p.kind for p in circuit.bought)
    counts = [(len(circuit.amplifiers), "op-amp")]
    counts += [(kinds[kind], kind) for kind in ("resistor", "capacitor") if kinds[kind]]
    return ", ".join(f"{n} {word}{'' if n == 1 else 's'}" for n, word in counts)


def _entries(
    connections: Connections, supply: tuple[float, float], flagged: bool
) -> Iterable[tuple[str, str]]:
    circuit = connections.circuit
    kinds: dict[str, list[str]] = {}
    for a in circuit.amplifiers:
        f = a.figures
        figures = f"{f.kind}, {show(f.gain_bandwidth, 'Hz')}, {show(f.slew_rate, 'V/us')} typical"
        kinds.setdefault(figures, []).append(a.ref)
    for figures, refs in kinds.items():
        yield "op-amps", figures if len(kinds) == 1 else f"{' '.join(refs)}: {figures}"
    low, high = (f"{v:+g} V".replace("-", "−") for v in supply)
    yield "supply", f"{high} and {low} at every op-amp, pins not drawn"
    yield "decoupling", "100 nF per rail at every package (common practice)"
    for kind in ("resistor", "capacitor"):
        rules = _rules(p for p in circuit.bought if p.kind == kind)
        if rules:
            yield f"{kind}s", rules
    yield "heavy line", f"the path from {circuit.input_net} to {circuit.output_net}"
    if flagged:
        yield "flags", "one name is one net; the small reference drives it"
    if connections.source is not None or connections.loads:
        yield "dashed", "source or load, not on the board"


def _rules(parts: Iterable[Passive]) -> str:
    """Series (or stock) and tolerances, as they occur."""
    rules = dict.fromkeys((p.source, p.tolerance) for p in parts)
    return "; ".join(f"{series}, {show(tolerance, '%')}" for series, tolerance in rules)
