"""A sheet as SVG text: no scripts, no ids, no style sheet, so that it can stand in any page.

One px of the drawing is printed at most 0.35 mm large, so that the smallest circuit does not
fill a page; a large one is fitted to A4 or, where its letters would get too small, to A3.
"""

from __future__ import annotations

from collections.abc import Iterable

from netlist.schematic.geometry import Flag, Point, Sheet, Symbol, Text, dots
from netlist.svg import FONT, coordinate, escape

__all__ = ["READABLE", "print_scale", "sheet_svg"]

_TONES = {"ink": "#1a1a1a", "faint": "#666666", "accent": "#0b5c7a"}
_INK = _TONES["ink"]
_THIN, _HEAVY = 1.1, 2.2
_PAGES = ((277.0, 190.0), (400.0, 277.0))  # A4 and A3 within their margins [mm]
READABLE, _LARGEST = 0.25, 0.35  # mm of a px: letters of 7 and of 10 points


def sheet_svg(sheet: Sheet, *, width: float, height: float, title: str) -> str:
    """The text; everything on the sheet lies within 0..`width`, 0..`height` [px]."""
    scale = _scale(width, height)
    lines = [
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{coordinate(width * scale)}mm" '
        f'height="{coordinate(height * scale)}mm" '
        f'viewBox="0 0 {coordinate(width)} {coordinate(height)}" font-family="{FONT}">',
        f"<title>{escape(title)}</title>",
        f'<rect width="{coordinate(width)}" height="{coordinate(height)}" fill="#ffffff"/>',
        *_wires(sheet),
        *_dots(sheet),
        *_symbols(sheet.symbols),
        *_flags(sheet.flags),
        *_texts(sheet.texts),
        *_rules(sheet),
        "</svg>",
    ]
    return "\n".join(lines) + "\n"


def print_scale(width: float, height: float) -> float:
    """The largest print of a px that fits the largest page [mm]."""
    page_width, page_height = _PAGES[-1]
    return min(page_width / width, page_height / height, _LARGEST)


def _scale(width: float, height: float) -> float:
    """Millimetres of one px on the smallest page on which the letters can be read."""
    for page_width, page_height in _PAGES:
        scale = min(page_width / width, page_height / height, _LARGEST)
        if scale >= READABLE:
            return scale
    return print_scale(width, height)


def _group(attributes: str, lines: Iterable[str]) -> Iterable[str]:
    inner = list(lines)
    return [f"<g {attributes}>", *inner, "</g>"] if inner else []


def _path(points: Iterable[Point], *, closed: bool = False) -> str:
    text = "L".join(f"{coordinate(x)} {coordinate(y)}" for x, y in points)
    return f"M{text}{'Z' if closed else ''}"


def _wires(sheet: Sheet) -> Iterable[str]:
    """Wires net by net; the net's name shows when the pointer rests on one."""
    for heavy in (False, True):
        by_net: dict[str, list[str]] = {}
        for wire in sheet.wires:
            if wire.heavy == heavy:
                by_net.setdefault(wire.net, []).append(_path((wire.start, wire.end)))
        attributes = (
            f'fill="none" stroke="{_INK}" stroke-width="{_HEAVY if heavy else _THIN}" '
            'stroke-linecap="square"'
        )
        yield from _group(
            attributes,
            (
                f'<path d="{"".join(paths)}"><title>net {escape(net)}</title></path>'
                for net, paths in by_net.items()
            ),
        )


def _dots(sheet: Sheet) -> Iterable[str]:
    return _group(
        f'fill="{_INK}"',
        (
            f'<circle cx="{coordinate(x)}" cy="{coordinate(y)}" r="{3.2 if heavy else 2.6}"/>'
            for (x, y), heavy in dots(sheet.wires)
        ),
    )


def _symbols(symbols: Iterable[Symbol]) -> Iterable[str]:
    return _group(
        f'fill="#ffffff" stroke="{_INK}" stroke-width="1.4" stroke-linejoin="round"',
        (f"<g>{_hint(s)}{_SHAPES[s.kind](s)}</g>" for s in symbols),
    )


def _hint(symbol: Symbol) -> str:
    return f"<title>{escape(symbol.hint)}</title>" if symbol.hint else ""


def _resistor(s: Symbol) -> str:
    b = s.box
    dash = ' stroke-dasharray="3 2"' if s.dashed else ""
    return (
        f'<rect x="{coordinate(b.left)}" y="{coordinate(b.top)}" '
        f'width="{coordinate(b.right - b.left)}" height="{coordinate(b.bottom - b.top)}"{dash}/>'
    )


def _capacitor(s: Symbol) -> str:
    b = s.box
    plates = _path(((b.left, b.top), (b.left, b.bottom)))
    plates += _path(((b.right, b.top), (b.right, b.bottom)))
    return f'<path d="{plates}" stroke-width="2"/>'


def _op_amp(s: Symbol) -> str:
    b, (x, y) = s.box, s.at
    outline = _path(((x, b.top), (b.right, y), (x, b.bottom)), closed=True)
    signs = []
    for name, (px, py) in s.pins:
        if name != "out":
            signs.append(_path(((px + 4, py), (px + 10, py))))
        if name == "+":
            signs.append(_path(((px + 7, py - 3), (px + 7, py + 3))))
    return f'<path d="{outline}"/><path d="{"".join(signs)}" stroke-width="1"/>'


def _ground(s: Symbol) -> str:
    x, y = s.at
    bars = "".join(
        _path(((x - half, y + drop), (x + half, y + drop)))
        for half, drop in ((8, 0), (5, 4), (2, 8))
    )
    return f'<path d="{bars}"/>'


_SHAPES = {
    "resistor": _resistor,
    "capacitor": _capacitor,
    "op_amp": _op_amp,
    "ground": _ground,
}


def _flags(flags: Iterable[Flag]) -> Iterable[str]:
    for port in (False, True):
        yield from _group(
            f'fill="#ffffff" stroke="{_TONES["accent"]}" stroke-width="{1.8 if port else 1.1}" '
            'stroke-linejoin="round"',
            (
                f'<path d="{_path(flag.outline, closed=True)}"/>'
                for flag in flags
                if flag.port == port
            ),
        )
    yield from _texts(flag.lettering for flag in flags)


def _texts(texts: Iterable[Text]) -> Iterable[str]:
    for text in texts:
        x, y = text.at
        anchor = "" if text.side == "start" else f' text-anchor="{text.side}"'
        weight = ' font-weight="bold"' if text.bold else ""
        yield (
            f'<text x="{coordinate(x)}" y="{coordinate(y)}" '
            f'font-size="{coordinate(text.size)}"{anchor}{weight} fill="{_TONES[text.tone]}">'
            f"{escape(text.text)}</text>"
        )


def _rules(sheet: Sheet) -> Iterable[str]:
    path = "".join(_path((r.start, r.end)) for r in sheet.rules)
    return _group(f'fill="none" stroke="{_INK}" stroke-width="1"', [f'<path d="{path}"/>'])
