"""How wide text is, and how values are written on a drawing.

Widths are those of DejaVu Sans, among the widest of the usual sans-serif faces, so that a text
set in another one stays within its box.
"""

from __future__ import annotations

from netlist.svg import FONT
from synth.circuit import Passive
from synth.errors import QuantityError
from synth.quantities import marking, show

__all__ = ["FONT", "ascent", "descent", "value_text", "width", "wrapped"]

# Advance widths of DejaVu Sans from the space to the tilde, in 1/1000 em.
# fmt: off
_ASCII = (
    318, 401, 460, 838, 636, 950, 780, 275, 390, 390, 500, 838, 318, 361, 318, 337,
    636, 636, 636, 636, 636, 636, 636, 636, 636, 636, 337, 337, 838, 838, 838, 531,
    1000, 684, 686, 698, 770, 632, 575, 775, 752, 295, 295, 656, 557, 863, 748, 787,
    603, 787, 695, 635, 611, 732, 684, 989, 685, 611, 685, 390, 337, 390, 838, 500,
    500, 613, 635, 550, 635, 615, 352, 635, 634, 278, 278, 579, 278, 974, 634, 612,
    635, 635, 411, 521, 392, 634, 592, 818, 592, 592, 525, 636, 337, 636, 838,
)
# fmt: on
_OTHER = {"µ": 636, "Ω": 764, "·": 318, "−": 838, "±": 838, "→": 838}
_BOLD = 1.27  # the bold face against the regular one, at most


def width(text: str, size: float, *, bold: bool = False) -> float:
    """Width [px] of a text set at `size` px; a character not in the table counts as 1.1 em."""
    total = 0
    for c in text:
        code = ord(c) - 32
        total += _ASCII[code] if 0 <= code < len(_ASCII) else _OTHER.get(c, 1100)
    return total * size / 1000 * (_BOLD if bold else 1.0)


def ascent(size: float) -> float:
    """Height of the tallest letters above the baseline [px]."""
    return 0.78 * size


def descent(size: float) -> float:
    """Depth of the deepest letters below the baseline [px]."""
    return 0.24 * size


def value_text(part: Passive) -> str:
    """The marking of a standard value; a value of more digits rounded, with its unit."""
    try:
        return marking(part.value, part.kind)
    except QuantityError:
        return show(part.value, "ohm" if part.kind == "resistor" else "F")


def wrapped(text: str, size: float, limit: float, *, bold: bool = False) -> list[str]:
    """`text` in lines no wider than `limit` px, broken at spaces, within a word if need be."""
    lines: list[str] = []
    line = ""
    for word in text.split():
        longer = f"{line} {word}" if line else word
        if width(longer, size, bold=bold) <= limit:
            line = longer
            continue
        if line:
            lines.append(line)
        line = word
        while width(line, size, bold=bold) > limit and len(line) > 1:
            cut = len(line) - 1
            while cut > 1 and width(line[:cut], size, bold=bold) > limit:
                cut -= 1
            lines.append(line[:cut])
            line = line[cut:]
    return [*lines, line] if line else lines
