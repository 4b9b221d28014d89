"""How all plots look: colours, fonts, axes, and the way from a figure to SVG text.

The colours stay apart for the common kinds of colour blindness and in grey: what is wanted is
a broad light line, what was found a narrow dark one on top of it, limits are broken lines.
"""

from __future__ import annotations

import io
import re
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from netlist.svg import coordinate, prefix_ids

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "BAND",
    "FOUND",
    "GRID",
    "INK",
    "LIMIT",
    "MUTED",
    "OTHERS",
    "WANTED",
    "drawing",
    "engineering",
    "frequency_axis",
    "heading",
    "svg_text",
]

INK = "#20262e"
MUTED = "#56606c"
GRID = "#d9dee3"
WANTED = "#eab04a"  # amber
FOUND = "#174a84"  # deep blue
BAND = "#a9c8e6"  # pale blue
LIMIT = "#b2402a"  # brick
OTHERS = ("#4d9a8c", "#a05c9b", "#8a7a3c", "#6d7f91")  # sea green, plum, olive, slate

_SETTINGS: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "polewright",
    "font.family": ["DejaVu Sans"],
    "font.size": 9.0,
    "axes.edgecolor": MUTED,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.titlesize": 9.5,
    "axes.axisbelow": True,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "grid.color": GRID,
    "grid.linewidth": 0.6,
    "legend.frameon": False,
    "legend.fontsize": 8.5,
    "text.color": INK,
    "text.parse_math": False,
    "axes.unicode_minus": True,
}


@contextmanager
def drawing() -> Iterator[None]:
    """The settings of all plots, whatever the user's own are."""
    import matplotlib as mpl

    with mpl.rc_context(), warnings.catch_warnings():
        # A character the font lacks is shown by the font of the reader.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        mpl.rcdefaults()
        mpl.rcParams.update(_SETTINGS)
        yield


def svg_text(figure: Figure, prefix: str) -> str:
    """The figure as one svg element with prefixed ids, no prolog and no date."""
    buffer = io.StringIO()
    figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    text = buffer.getvalue()
    text = re.sub(r"\s*<metadata>.*?</metadata>", "", text[text.index("<svg") :], flags=re.DOTALL)
    text = re.sub(r'(?<= d=")[^"]+', _rounded, text)
    return prefix_ids(text, f"{prefix}-")


def _rounded(path: re.Match[str]) -> str:
    """Path data in hundredths of a point, on fewer lines."""
    short = re.sub(r"-?\d+\.\d{3,}", lambda number: coordinate(float(number[0])), path[0])
    return " ".join(short.split())


def heading(figure: Figure, title: str) -> None:
    """The title at the top left."""
    _, height = figure.get_size_inches()
    figure.text(0.012, 1 - 0.11 / height, title, size=11, weight="bold", va="top", ha="left")


def frequency_axis(axes: Axes, frequency_hz: NDArray[np.float64], *, labelled: bool = True) -> None:
    """A logarithmic frequency axis over the range of the data, with engineering ticks."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator

    low, high = float(np.min(frequency_hz)), float(np.max(frequency_hz))
    axes.set_xscale("log")
    if low == high:
        low, high = low / 2, high * 2
    axes.set_xlim(low, high)
    subs = (1.0, 2.0, 5.0) if high / low < 150 else (1.0,)
    axes.xaxis.set_major_locator(LogLocator(subs=subs, numticks=12 if high / low > 1e8 else 30))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: engineering(value)))
    axes.grid(visible=True, which="major")
    # The fine grid is one line with gaps: a hundred minor ticks would cost half the time.
    decades = 10.0 ** np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)))
    fine = np.outer(decades, np.arange(2, 10)).ravel()
    fine = np.repeat(fine[(fine > low) & (fine < high)], 3)
    ends = np.tile([0.0, 1.0, np.nan], fine.size // 3)
    across = axes.get_xaxis_transform()
    axes.plot(fine, ends, color=GRID, linewidth=0.35, zorder=0.5, transform=across, scaley=False)
    if labelled:
        axes.set_xlabel("frequency [Hz]")
    else:
        axes.tick_params(labelbottom=False)


def engineering(value: float, unit: str = "") -> str:
    """A number with an SI prefix and a unit, at most four digits.

    Examples
    --------
    >>> [engineering(v) for v in (0.1, 1.0, 20.0, 1000.0, 2.5e6)]
    ['0.1', '1', '20', '1k', '2.5M']
    >>> engineering(0.0123, "V")
    '12.3 mV'
    """
    prefixes = {-12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}
    if value == 0 or not np.isfinite(value):
        exponent = 0
    else:
        exponent = int(3 * np.floor(np.log10(float(f"{abs(value):.3e}")) / 3 + 1e-9))
        exponent = min(max(exponent, -12), 9)
        if not unit and 0.001 <= abs(value) < 1:
            exponent = 0
    number = f"{value / 10.0**exponent:.4g}".replace("-", "−")
    return f"{number}{' ' if unit else ''}{prefixes[exponent]}{unit}"
