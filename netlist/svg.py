"""Small help for SVG text: escaping, numbers, text width, and ids for inlining.

Coordinates are in px, y grows downwards.  Everything here is pure text work, so equal input
gives equal bytes.
"""

from __future__ import annotations

import re
from xml.sax.saxutils import escape as _escape

__all__ = ["FONT", "coordinate", "escape", "prefix_ids", "text_width"]

FONT = "DejaVu Sans, Helvetica, Arial, sans-serif"

# Advance widths of DejaVu Sans in em (measured with its regular face), rounded up.
_NARROW = frozenset("ijl.,:;'|!()[] ")
_WIDE = frozenset("mwMW%@")
_XML_CONTROL = re.compile(r"[^\t\n\r\x20-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")


def escape(text: str) -> str:
    """`text` as it may stand between tags or inside double quotes, without the control
    characters that XML 1.0 does not allow."""
    return _escape(_XML_CONTROL.sub("", text), {'"': "&quot;"})


def coordinate(value: float) -> str:
    """A coordinate with at most two decimals and no trailing zeros."""
    return f"{round(value, 2) + 0.0:.2f}".rstrip("0").rstrip(".")


def text_width(text: str, size: float) -> float:
    """An upper estimate of the width [px] of `text` set in `FONT` at `size` px."""
    em = sum(0.4 if c in _NARROW else 1.0 if c in _WIDE else 0.66 for c in text)
    return em * size


def prefix_ids(svg: str, prefix: str) -> str:
    """`svg` with every id, and every reference to one, starting with `prefix`.

    Several drawings in one page then keep their clip paths and markers apart.  `prefix` is
    letters, digits and hyphens, first a letter.

    Raises
    ------
    ValueError
        A prefix that cannot start an id.

    Examples
    --------
    >>> prefix_ids('<g id="a"/><use href="#a"/><path clip-path="url(#a)"/>', "bode-")
    '<g id="bode-a"/><use href="#bode-a"/><path clip-path="url(#bode-a)"/>'
    """
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9-]*", prefix):
        raise ValueError(f"got the prefix {prefix!r}, expected a letter, then letters or digits")
    svg = re.sub(r'(?<=[\s])id="', f'id="{prefix}', svg)
    svg = re.sub(r'href="#', f'href="#{prefix}', svg)
    return re.sub(r"url\(#", f"url(#{prefix}", svg)
