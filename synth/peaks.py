"""How large every signal of a block graph gets for the stated input.

For steady sines a signal's peak is the Linf norm of its transfer function, over all
frequencies; with a pole at the origin from the lower edge of the band upward, since below it
the signal grows without bound.  For any bounded input it is the L1 norm.  The rate of change
is the largest 2 pi f |G(f)| within the band.  All figures are per volt of input.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import RealizationError
from synth.graph import BlockGraph
from synth.statespace import StateSpace
from synth.transfer import Factor, TransferFunction

__all__ = ["SignalPeaks", "frequencies_of_interest", "frequencies_within", "signal_peaks"]

Real = NDArray[np.float64]

# A pair of poles on the axis has no finite peak: it is judged this far (a ratio) beside it.
AXIS_DISTANCE = 0.01


@dataclass(frozen=True, kw_only=True)
class SignalPeaks:
    """Peaks of every block, per volt of input, before any scaling.

    Attributes
    ----------
    peak
        Largest value [V/V].
    peak_hz
        Where the Linf norm is taken [Hz]; None for the L1 norm.
    rate
        Largest 2 pi f |G| within the band [1/s].
    norm
        ``"Linf"`` or ``"L1"``.
    from_hz
        Lower end of the frequencies searched, None for all.
    """

    peak: dict[str, float]
    peak_hz: dict[str, float | None]
    rate: dict[str, float]
    norm: str
    from_hz: float | None


def signal_peaks(
    graph: BlockGraph,
    target: TransferFunction,
    *,
    band_hz: tuple[float, float],
    swing: str,
) -> SignalPeaks:
    """Peaks of every block of a graph that realises `target`.

    Parameters
    ----------
    band_hz
        Lowest and highest frequency of the job [Hz].
    swing
        ``"sine"`` for the Linf norm, ``"any"`` for the L1 norm.

    Raises
    ------
    RealizationError
        ``"any"`` with a pole on or right of the imaginary axis: no input bound bounds it.
    """
    names = tuple(b.name for b in graph.blocks)
    from_hz = band_hz[0] if target.poles_at_origin else None
    grid = frequencies_of_interest(target, from_hz=from_hz)
    gains = _gains(graph, grid)
    within = frequencies_within(band_hz, target)
    rates = {n: float(np.max(2 * np.pi * within * g)) for n, g in _gains(graph, within).items()}
    if swing == "any":
        if np.any(target.poles.real >= 0):
            raise RealizationError(
                "signal.swing: got 'any' for an H(s) with a pole on or right of the imaginary "
                "axis, whose output no bound on the input bounds; expected 'sine'"
            )
        levels = {n: 1 / float(np.max(g)) for n, g in gains.items()}
        norms = StateSpace.of_signals(graph.rescaled(levels), names).l1_norms()
        peak = {n: float(v) / levels[n] for n, v in zip(names, norms, strict=True)}
        return SignalPeaks(
            peak=peak, peak_hz=dict.fromkeys(names), rate=rates, norm="L1", from_hz=None
        )
    found = _refined(graph, target, grid, gains)
    return SignalPeaks(
        peak={n: v for n, (v, _) in found.items()},
        peak_hz={n: f for n, (_, f) in found.items()},
        rate=rates,
        norm="Linf",
        from_hz=from_hz,
    )


def frequencies_of_interest(target: TransferFunction, *, from_hz: float | None = None) -> Real:
    """A grid that sees every peak of every signal, ascending [Hz].

    From four decades below the lowest root to four above the highest (or from `from_hz`),
    with extra points within a few bandwidths of every pair of poles.
    """
    factors = (*target.pole_factors, *target.zero_factors)
    corners = [f.natural_frequency / (2 * np.pi) for f in factors if f.natural_frequency]
    corners = corners or [from_hz or 1.0]
    low = from_hz if from_hz is not None else min(corners) * 1e-4
    high = max(*corners, low) * 1e4
    points = [np.geomspace(low, high, max(2, round(50 * math.log10(high / low))))]
    points += [_around(p) for p in target.pole_factors if p.degree == 2]
    grid = np.unique(np.concatenate(points))
    return _beside_the_axis(grid[grid >= low], target)


def frequencies_within(band_hz: tuple[float, float], target: TransferFunction) -> Real:
    """A grid over the band, both ends included, that sees every peak in it, ascending [Hz]."""
    low, high = band_hz
    everywhere = frequencies_of_interest(target, from_hz=low)
    inside = everywhere[(everywhere > low) & (everywhere < high)]
    return _beside_the_axis(np.union1d(np.geomspace(low, high, 400), inside), target)


def _beside_the_axis(grid: Real, target: TransferFunction) -> Real:
    """The grid without what lies closer than `AXIS_DISTANCE` to a pair of poles on the axis."""
    for pair in (p for p in target.pole_factors if p.degree == 2 and math.isinf(p.q)):
        f0 = pair.natural_frequency / (2 * np.pi)
        grid = grid[np.abs(grid / f0 - 1) >= AXIS_DISTANCE * (1 - 1e-9)]
    return np.asarray(grid)


def _around(pair: Factor) -> Real:
    f0 = pair.natural_frequency / (2 * np.pi)
    if math.isinf(pair.q):
        return f0 * (1 + AXIS_DISTANCE * np.array([-2.0, -1.0, 1.0, 2.0]))
    width = 1 / (2 * max(abs(pair.q), 0.5))
    return np.asarray(f0 * np.exp(np.linspace(-4, 4, 81) * width))


def _gains(graph: BlockGraph, frequency_hz: Real) -> dict[str, Real]:
    signals = graph.signals(2j * np.pi * frequency_hz)
    return {name: np.abs(value) for name, value in signals.items()}


def _refined(
    graph: BlockGraph, target: TransferFunction, grid: Real, gains: dict[str, Real]
) -> dict[str, tuple[float, float]]:
    """Largest gain of each block and its frequency, between the neighbours of the grid."""
    best = {n: int(np.argmax(g)) for n, g in gains.items()}
    bounds = {
        n: (float(grid[max(k - 1, 0)]), float(grid[min(k + 1, grid.size - 1)]))
        for n, k in best.items()
    }
    found = {n: (float(gains[n][k]), float(grid[k])) for n, k in best.items()}
    for _ in range(3):
        for name, (low, high) in bounds.items():
            fine = _beside_the_axis(np.geomspace(low, high, 13), target)
            gain = _gains(graph, fine)[name]
            k = int(np.argmax(gain))
            if gain[k] > found[name][0]:
                found[name] = (float(gain[k]), float(fine[k]))
            bounds[name] = (float(fine[max(k - 1, 0)]), float(fine[min(k + 1, fine.size - 1)]))
    return found
