"""Noise density at the output over frequency."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from netlist.plots import style

__all__ = ["noise_plot"]

_SIZE = (7.6, 3.6)  # inches


def noise_plot(
    frequency_hz: ArrayLike, density: ArrayLike, *, title: str, prefix: str = "noise"
) -> str:
    """Noise density as SVG text, both axes logarithmic.

    Parameters
    ----------
    frequency_hz, density
        Shape (F,) [Hz], [V/rtHz]; a density of zero leaves a gap.
    prefix
        What ids in the SVG start with.

    Raises
    ------
    ValueError
        Arrays of different shapes, or no frequencies.
    """
    from matplotlib.figure import Figure
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    f, values = np.asarray(frequency_hz, dtype=float), np.asarray(density, dtype=float)
    if f.ndim != 1 or not f.size or values.shape != f.shape:
        raise ValueError(f"density: got shape {values.shape}, expected that of the frequencies")
    known = values[values > 0]
    low, high = (float(np.min(known)), float(np.max(known))) if known.size else (1e-9, 1e-8)
    low, high = max(low, high * 1e-6) / 1.4, high * 1.4
    with style.drawing():
        figure = Figure(figsize=_SIZE)
        axes = figure.add_axes((0.11, 0.145, 0.87, 0.735))
        style.heading(figure, title)
        axes.plot(f, np.where(values > 0, values, np.nan), color=style.FOUND, linewidth=1.5)
        axes.set_yscale("log")
        axes.set_ylim(low, high)
        narrow = high / low < 300
        axes.yaxis.set_major_locator(LogLocator(subs=(1, 2, 5) if narrow else (1,), numticks=20))
        axes.yaxis.set_major_formatter(FuncFormatter(lambda v, _: style.engineering(v, "V")))
        axes.yaxis.set_minor_formatter(NullFormatter())
        axes.set_ylabel("density [V/√Hz]")
        style.frequency_axis(axes, f)
        return style.svg_text(figure, prefix)
