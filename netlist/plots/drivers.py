"""The parts that drive the error of the boards, ranked."""

from __future__ import annotations

from collections.abc import Sequence

from netlist.plots import style
from synth.boardruns import Driver

__all__ = ["MOST_DRIVERS", "driver_chart", "driver_name"]

MOST_DRIVERS = 12
"""Bars of the chart."""

_ROW = 0.27  # inches
_WIDTH = 7.6

# Of the width: where the bars start, how long they get, where shares end and remarks start.
_LEFT, _LENGTH = 0.105, 0.285
_SHARE_ENDS, _REMARK_STARTS = 0.465, 0.48

SMALLEST_SHARE = 0.01
"""Of the variance [%]; a smaller one is told as less than this."""


def driver_name(driver: Driver) -> str:
    """``"C3"``, or ``"U1 to U4"`` for the op-amps of a package."""
    if len(driver.refs) == 1:
        return driver.refs[0]
    return f"{driver.refs[0]} to {driver.refs[-1]}"


def driver_chart(
    drivers: Sequence[Driver],
    *,
    title: str = "Parts that drive the error of the boards",
    remarks: Sequence[str] = (),
    prefix: str = "drivers",
) -> str:
    """One bar for each of the first parts, its length the share of the variance, as SVG text.

    Parameters
    ----------
    drivers
        By falling share.
    remarks
        What stands beside each bar, in the same order; none by default.

    Raises
    ------
    ValueError
        No drivers.
    """
    from matplotlib.figure import Figure
    from matplotlib.ticker import FuncFormatter, MaxNLocator

    if not drivers:
        raise ValueError("got no drivers, expected at least one")
    shown = drivers[:MOST_DRIVERS]
    height = 0.95 + _ROW * len(shown)
    shares = [100 * d.share for d in shown]
    with style.drawing():
        figure = Figure(figsize=(_WIDTH, height))
        axes = figure.add_axes((_LEFT, 0.52 / height, _LENGTH, _ROW * len(shown) / height))
        style.heading(figure, title)
        axes.barh(range(len(shown)), shares, height=0.62, color=style.FOUND, linewidth=0)
        for k, share in enumerate(shares):
            remark = remarks[k] if k < len(remarks) else ""
            for place, text, end in (
                (_SHARE_ENDS, _share_text(share), "right"),
                (_REMARK_STARTS, remark, "left"),
            ):
                axes.text(
                    (place - _LEFT) / _LENGTH,
                    k,
                    text,
                    transform=axes.get_yaxis_transform(),
                    va="center",
                    ha=end,
                    size=8,
                    color=style.INK,
                )
        axes.set_ylim(len(shown) - 0.5, -0.5)
        axes.set_xlim(0, 1.05 * max(shares))
        axes.set_yticks(range(len(shown)), [driver_name(d) for d in shown])
        axes.tick_params(axis="y", length=0)
        axes.xaxis.set_major_locator(MaxNLocator(4))
        axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g} %"))
        axes.set_xlabel("share of the variance of the error")
        axes.grid(visible=True, axis="x")
        return style.svg_text(figure, prefix)


def _share_text(share: float) -> str:
    """Two digits, at most two of them decimals, so that the column stays narrow."""
    if share < SMALLEST_SHARE:
        return f"<{SMALLEST_SHARE:g} %"
    decimals = 0 if share >= 9.95 else 1 if share >= 0.995 else 2
    return f"{share:.{decimals}f} %"
