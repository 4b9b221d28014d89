"""The response over time of every op-amp output, the output of the board in front."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike

from netlist.plots import style

__all__ = ["step_plot"]

_SIZE = (8.6, 4.2)  # inches
_UNITS = ((1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns"))
_DASHES = ((), (5, 2), (1.5, 1.5), (6, 2, 1.5, 2))


def step_plot(
    time_s: ArrayLike,
    voltages: Mapping[str, ArrayLike],
    *,
    rails: tuple[float, float],
    output_net: str,
    title: str,
    ideal: ArrayLike | None = None,
    prefix: str = "step",
) -> str:
    """Voltages over time as SVG text.

    Parameters
    ----------
    time_s
        Rising, shape (T,) [s].
    voltages
        Of each net, shape (T,) [V].
    rails
        Negative and positive supply [V]; drawn when a voltage comes near them.
    output_net
        The net drawn strongest.
    ideal
        What the output of the target would be, shape (T,) [V].
    prefix
        What ids in the SVG start with.

    Raises
    ------
    ValueError
        Arrays of different shapes, or an output net without a voltage.
    """
    from matplotlib.figure import Figure

    t = np.asarray(time_s, dtype=float)
    curves = {net: np.asarray(v, dtype=float) for net, v in voltages.items()}
    wanted = None if ideal is None else np.asarray(ideal, dtype=float)
    if output_net not in curves:
        raise ValueError(f"no voltage for the output net {output_net!r} among {sorted(curves)}")
    for net, values in (*curves.items(), *([] if wanted is None else [("ideal", wanted)])):
        if values.shape != t.shape or not t.size:
            raise ValueError(f"{net}: got shape {values.shape}, expected that of time, {t.shape}")
    scale, unit = next((u for u in _UNITS if float(np.max(np.abs(t))) >= u[0]), _UNITS[-1])
    with style.drawing():
        figure = Figure(figsize=_SIZE)
        axes = figure.add_axes((0.075, 0.125, 0.755, 0.765))
        style.heading(figure, title)
        if wanted is not None:
            axes.plot(t / scale, wanted, color=style.WANTED, linewidth=3.4, label="target")
        inner = [net for net in curves if net != output_net]
        for k, net in enumerate(inner):
            colour = style.OTHERS[k % len(style.OTHERS)]
            dashes = _DASHES[k // len(style.OTHERS) % len(_DASHES)]
            axes.plot(t / scale, curves[net], color=colour, linewidth=0.9, dashes=dashes, label=net)
        axes.plot(t / scale, curves[output_net], color=style.FOUND, linewidth=1.7, label=output_net)
        everything = np.concatenate(list(curves.values()))
        low, high = float(np.min(everything)), float(np.max(everything))
        near = low < 0.5 * rails[0] or high > 0.5 * rails[1]
        if near:
            for rail in rails:
                line = axes.axhline(rail, color=style.LIMIT, linewidth=1.1, linestyle=(0, (5, 3)))
            line.set_label("rails")
            low, high = min(low, rails[0]), max(high, rails[1])
        margin = 0.06 * (high - low) or 1.0
        axes.set_ylim(low - margin, high + margin)
        axes.set_xlim(float(t[0]) / scale, float(t[-1]) / scale if t[-1] > t[0] else None)
        axes.set_xlabel(f"time [{unit}]")
        axes.set_ylabel("voltage [V]")
        axes.grid(visible=True)
        handles, labels = axes.get_legend_handles_labels()
        first = labels.index(output_net)
        order = sorted(range(len(labels)), key=lambda k: (k != first, k))
        axes.legend(
            [handles[k] for k in order],
            [labels[k] for k in order],
            loc="upper left",
            bbox_to_anchor=(1.01, 1.01),
            borderaxespad=0,
        )
        return style.svg_text(figure, prefix)
