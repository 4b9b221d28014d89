"""The Bode plot: what was asked, what was found, and the errors between them with their limits.

Left the magnitude, right the phase; below each its error.  Errors are those of the verdict:
of ln(H/T), the phase modulo 360 degrees.  The phase of what was found is drawn on the branch
of the target.  A zero on the frequency axis, where the target vanishes, leaves a gap.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from netlist.plots import style
from synth.evidence import ResponseError, response_error
from synth.job import Accept
from synth.results import ToleranceResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["bode_plot", "magnitude_range", "unwrapped_deg"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_SIZE = (10.4, 6.3)  # inches
_FLOOR_DB = -1e4  # stands for a magnitude of zero, far below any axis


def bode_plot(
    frequency_hz: ArrayLike,
    target: ArrayLike,
    simulated: ArrayLike | None,
    *,
    tolerance: ToleranceResult | None,
    accept: Accept,
    title: str,
    predicted: ArrayLike | None = None,
    prefix: str = "bode",
) -> str:
    """Magnitude and phase over frequency, and their errors, as SVG text.

    Parameters
    ----------
    frequency_hz
        Rising, shape (F,) [Hz].
    target, simulated
        H and what the simulator gave, complex, shape (F,); `simulated` None where it gave
        nothing, which the picture then says.
    tolerance
        A run of boards; its 5th to 95th percentile is drawn as a band.
    accept
        The limits drawn in the error panels.
    predicted
        The response computed without the simulator, shape (F,); drawn when `simulated` is None.
    prefix
        What ids in the SVG start with.

    Raises
    ------
    ValueError
        Arrays of different shapes, no frequencies, or frequencies that do not rise.
    """
    from matplotlib.figure import Figure

    f = np.asarray(frequency_hz, dtype=float)
    wanted = _response("target", target, f)
    found = None if simulated is None else _response("simulated", simulated, f)
    if found is None and predicted is not None:
        found = _response("predicted", predicted, f)
    name = "ngspice" if simulated is not None else "predicted, not simulated"
    error = None if found is None else response_error(found, wanted)
    with style.drawing():
        figure = Figure(figsize=_SIZE)
        panels = figure.subplots(2, 2, sharex="col", height_ratios=(3, 2))
        figure.subplots_adjust(
            left=0.085, right=0.985, bottom=0.08, top=0.88, wspace=0.2, hspace=0.08
        )
        style.heading(figure, title)
        _responses(panels[0], f, wanted, error=error, tolerance=tolerance, name=name)
        _errors(panels[1], f, error=error, tolerance=tolerance, accept=accept)
        for axes in panels.flat:
            axes.yaxis.set_label_coords(-0.13, 0.5)
        _legend(figure, panels, simulated is not None)
        return style.svg_text(figure, prefix)


def magnitude_range(db: Real) -> tuple[float, float]:
    """Lower and upper end of a dB axis that a deep, narrow notch does not stretch.

    The axis reaches down to the smallest value, but no further below the level that 97 % of
    the points keep than about a third of the range above it.
    """
    finite = db[np.isfinite(db)]
    if not finite.size:
        return -1.0, 1.0
    top = float(np.max(finite))
    common = float(np.percentile(finite, 3))
    bottom = max(float(np.min(finite)), common - 0.35 * (top - common) - 6)
    middle, half = (top + bottom) / 2, max((top - bottom) / 2, 1.0)
    return middle - 1.08 * half, middle + 1.08 * half


def unwrapped_deg(response: Complex) -> Real:
    """Phase [deg], continuous, starting within -190 and 170; NaN where the response vanishes."""
    out = np.full(response.shape, np.nan)
    known = np.isfinite(response) & (response != 0)
    if np.any(known):
        phase = np.degrees(np.unwrap(np.angle(response[known])))
        out[known] = phase - 360 * np.ceil((phase[0] - 170) / 360)
    return out


def _response(name: str, values: ArrayLike, frequency_hz: Real) -> Complex:
    out = np.asarray(values, dtype=complex)
    if frequency_hz.ndim != 1 or not frequency_hz.size or np.any(np.diff(frequency_hz) <= 0):
        raise ValueError("frequencies: expected at least one, each above the one before")
    if out.shape != frequency_hz.shape:
        raise ValueError(
            f"{name}: got shape {out.shape}, expected that of the frequencies, {frequency_hz.shape}"
        )
    return out


def _decibel(response: Complex) -> Real:
    magnitude = np.abs(response)
    db = np.full(magnitude.shape, _FLOOR_DB)
    np.log10(magnitude, out=db, where=magnitude > 0)
    return np.asarray(np.where(magnitude > 0, 20 * db, _FLOOR_DB))


def _responses(
    panels: NDArray[np.object_],
    f: Real,
    wanted: Complex,
    *,
    error: ResponseError | None,
    tolerance: ToleranceResult | None,
    name: str,
) -> None:
    """The upper panels."""
    magnitude, phase = panels
    db, deg = _decibel(wanted), unwrapped_deg(wanted)
    bands = (
        []
        if tolerance is None
        else [
            (magnitude, db, tolerance.magnitude_5, tolerance.magnitude_95),
            (phase, deg, tolerance.phase_5, tolerance.phase_95),
        ]
    )
    for axes, curve, low, high in bands:
        assert tolerance is not None
        grid = tolerance.frequency_hz
        around = np.interp(np.log(grid), np.log(f), curve)
        axes.fill_between(grid, around + low, around + high, color=style.BAND, linewidth=0)
    for axes, curve in ((magnitude, db), (phase, deg)):
        axes.plot(f, curve, color=style.WANTED, linewidth=3.4, label="target")
    if error is not None:
        found = {"color": style.FOUND, "linewidth": 1.2, "label": name}
        magnitude.plot(f, db + error.magnitude_db, **found)
        phase.plot(f, deg + error.phase_deg, **found)
    magnitude.set_ylim(*magnitude_range(np.where(db > _FLOOR_DB, db, -np.inf)))
    _phase_axis(phase, deg)
    magnitude.set_ylabel("magnitude [dB]")
    phase.set_ylabel("phase [deg]")
    for axes in (magnitude, phase):
        style.frequency_axis(axes, f, labelled=False)


def _phase_axis(axes: Axes, deg: Real) -> None:
    """Ticks at handy angles, and never less than 20 degrees in view."""
    from matplotlib.ticker import MultipleLocator

    finite = deg[np.isfinite(deg)]
    low, high = (float(np.min(finite)), float(np.max(finite))) if finite.size else (-10.0, 10.0)
    margin = max(0.06 * (high - low), (20 - (high - low)) / 2)
    axes.set_ylim(low - margin, high + margin)
    span = high - low + 2 * margin
    step = next((s for s in (5, 10, 15, 30, 45, 90) if span / s <= 8), 180)
    axes.yaxis.set_major_locator(MultipleLocator(step))


def _errors(
    panels: NDArray[np.object_],
    f: Real,
    *,
    error: ResponseError | None,
    tolerance: ToleranceResult | None,
    accept: Accept,
) -> None:
    """The lower panels."""
    described = (
        (panels[0], "magnitude_db", "magnitude", accept.magnitude_db, "dB"),
        (panels[1], "phase_deg", "phase", accept.phase_deg, "deg"),
    )
    for axes, attribute, kind, limit, unit in described:
        shown = [np.array([limit])]
        if tolerance is not None:
            low, high = (getattr(tolerance, f"{kind}_{p}") for p in (5, 95))
            axes.fill_between(
                tolerance.frequency_hz,
                low,
                high,
                color=style.BAND,
                linewidth=0,
                label="5 % to 95 % of boards",
            )
            shown += [low, high]
        if error is not None:
            values = getattr(error, attribute)
            axes.plot(f, np.where(np.isfinite(values), values, np.nan), color=style.FOUND, lw=1.2)
            shown.append(values)
        axes.axhline(0, color=style.WANTED, linewidth=1.6, zorder=1.5)
        for sign in (-1, 1):
            axes.axhline(sign * limit, color=style.LIMIT, linewidth=1.1, linestyle=(0, (5, 3)))
        _error_axis(axes, shown, limit, unit)
        axes.set_ylabel(f"error [{unit}]")
        style.frequency_axis(axes, f)


def _error_axis(axes: Axes, shown: list[Real], limit: float, unit: str) -> None:
    """The limits always in view; errors far beyond them are cut off, and the picture says so."""
    from matplotlib.ticker import MaxNLocator

    everything = np.abs(np.concatenate(shown))
    largest = float(np.max(everything[np.isfinite(everything)], initial=limit))
    half = min(max(1.35 * limit, 1.1 * largest), 4 * limit)
    axes.set_ylim(-half, half)
    axes.yaxis.set_major_locator(MaxNLocator(nbins=7, steps=(1, 2, 2.5, 5, 10)))
    notes = []
    if largest > half:
        notes.append(f"off the scale: up to {largest:.3g} {unit}")
    if not np.all(np.isfinite(everything)):
        notes.append("none where the target is zero")
    if notes:
        axes.text(
            0.985,
            0.95,
            "; ".join(notes),
            transform=axes.transAxes,
            ha="right",
            va="top",
            size=8,
            color=style.LIMIT,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.5},
        )


def _legend(figure: Figure, panels: NDArray[np.object_], verified: bool) -> None:
    """One legend for all panels at the top right, and a warning where nothing was simulated."""
    from matplotlib.lines import Line2D

    handles, labels = panels[0, 0].get_legend_handles_labels()
    bands, names = panels[1, 0].get_legend_handles_labels()
    limit = Line2D([], [], color=style.LIMIT, linewidth=1.1, linestyle=(0, (5, 3)))
    figure.legend(
        [*handles, *bands, limit],
        [*labels, *names, "limit"],
        loc="upper right",
        bbox_to_anchor=(0.99, 0.948),
        ncols=4,
        borderaxespad=0,
    )
    if not verified:
        figure.text(
            0.085,
            0.918,
            "UNVERIFIED: no result from ngspice",
            size=9.5,
            weight="bold",
            color=style.LIMIT,
            va="center",
        )
