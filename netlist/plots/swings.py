"""How much of its room each op-amp output uses."""

from __future__ import annotations

from collections.abc import Sequence

from netlist.plots import style
from synth.results import Swing

__all__ = ["swing_chart"]

_ROW = 0.27  # inches
_WIDTH = 7.6


def swing_chart(
    swings: Sequence[Swing], *, title: str = "Peak of each op-amp output", prefix: str = "swings"
) -> str:
    """One bar for each op-amp output, its length the peak over its limit, as SVG text.

    Raises
    ------
    ValueError
        No swings.
    """
    from matplotlib.figure import Figure
    from matplotlib.ticker import MultipleLocator, PercentFormatter

    if not swings:
        raise ValueError("got no swings, expected at least one")
    height = 0.95 + _ROW * len(swings)
    shares = [100 * s.peak / s.peak_limit for s in swings]
    with style.drawing():
        figure = Figure(figsize=(_WIDTH, height))
        axes = figure.add_axes((0.17, 0.52 / height, 0.57, _ROW * len(swings) / height))
        style.heading(figure, title)
        end = max(110.0, min(1.05 * max(shares), 250.0))
        for k, (swing, share) in enumerate(zip(swings, shares, strict=True)):
            over = share > 100
            colour = style.LIMIT if over else style.FOUND
            axes.barh(k, min(share, end), height=0.62, color=colour, linewidth=0)
            where = _where(swing.peak_hz)
            axes.text(
                1.015,
                k,
                f"{_volts(swing.peak)} of {_volts(swing.peak_limit)} V{where}",
                transform=axes.get_yaxis_transform(),
                va="center",
                size=8,
                color=style.LIMIT if over else style.INK,
            )
        axes.axvline(100, color=style.LIMIT, linewidth=1.1, linestyle=(0, (5, 3)))
        axes.set_ylim(len(swings) - 0.5, -0.5)
        axes.set_xlim(0, end)
        axes.set_yticks(range(len(swings)), [f"{s.amplifier}  {s.net}" for s in swings])
        axes.tick_params(axis="y", length=0)
        axes.xaxis.set_major_locator(MultipleLocator(25 if end < 150 else 50))
        axes.xaxis.set_major_formatter(PercentFormatter(decimals=0))
        axes.set_xlabel("peak, share of the limit")
        axes.grid(visible=True, axis="x")
        return style.svg_text(figure, prefix)


def _volts(value: float) -> str:
    return f"{value:.3g}"


def _where(peak_hz: float | None) -> str:
    if peak_hz is None:
        return ""
    return f" at {style.engineering(float(f'{peak_hz:.3g}'), 'Hz')}" if peak_hz else " at DC"
