"""Chains of first- and second-order sections, and what a pairing and an order cost.

A chain of sections has partial products T_1, ..., T_N = H, and its gains are free.  So what a
pairing and an order cost does not depend on them: with the gains between the sections chosen so
that every section's output peaks as high as the output does, noise that enters at output k
reaches the output multiplied by

    n_k(f) = max|T_k| / max|H| * |H(f) / T_k(f)|,

and c_k = max n_k = max|T_k| max|H / T_k| / max|H| >= 1 is the dynamic range lost there: the
peak of output k, over that of the output, if what follows it may amplify nothing.  The largest
c_k is the chain's peak.  Its noise is the sum over the outputs of the mean of n_k^2 over
frequency, up to the highest root, or ten times it where H does not fall beyond its roots.  A
form knows no band, so maxima and means are over `search_frequencies`, which the roots decide.
(Lueder 1970 and Halfin 1970 search for flat partial products in a given band; from memory.)
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from synth.peaks import frequencies_of_interest
from synth.transfer import Factor, TransferFunction

__all__ = [
    "ROUNDING",
    "TINY",
    "ChainCost",
    "Section",
    "chain_cost",
    "log_sizes",
    "noise_weights",
    "search_frequencies",
]

Real = NDArray[np.float64]

# Frequencies of the search; and how far (a ratio) they go beyond the outermost roots.  Further
# out a partial product is a power of the frequency to 1e-4 and peaks nowhere.
FEW_FREQUENCIES = 200
BEYOND_ROOTS = 100.0

# The same below the lowest root where a pole lies at the origin and H grows without bound: a job
# starts its band where it wants the integrator to be seen, hardly far below its zero.
BELOW_ROOTS_WITH_INTEGRATOR = 10.0

# Noise counts up to the highest root; up to so many times it where H does not fall beyond its
# roots, as of a high-pass, whose band lies there.
NOISE_BEYOND_ROOTS = 10.0

# Frequencies and costs closer than this ratio are equal: their difference is rounding.
ROUNDING = 1e-9

# A root at the origin counts as this far down [rad/s] where distances are compared.
TINY = 1e-300


@dataclass
class Section:
    """Pole factors of one section and the zero factors given to it."""

    poles: list[Factor]
    zeros: list[Factor] = field(default_factory=list)

    @property
    def room(self) -> int:
        """How many more zeros fit."""
        return sum(p.degree for p in self.poles) - sum(z.degree for z in self.zeros)

    @property
    def q(self) -> float:
        """The largest |Q| of its poles."""
        return max(abs(p.q) for p in self.poles)

    @property
    def frequency(self) -> float:
        """Geometric mean of the poles [rad/s]."""
        product = math.prod(p.natural_frequency for p in self.poles)
        return float(product ** (1 / len(self.poles)))


@dataclass(frozen=True)
class ChainCost:
    """What a chain of sections costs; both are 1 for a single section.

    Attributes
    ----------
    peak
        Largest c_k, the dynamic range lost at the worst section output, a ratio.
    noise
        Sum over the section outputs of the mean of n_k^2, a ratio.
    """

    peak: float
    noise: float


def chain_cost(target: TransferFunction, chain: Sequence[Section]) -> ChainCost:
    """The cost of any chain of sections whose product is `target` up to its gain."""
    frequency = search_frequencies(target)
    size = log_sizes([(s.poles, s.zeros) for s in chain], frequency)
    ahead = np.cumsum(size, axis=0)
    behind = ahead[-1] - ahead
    gain = ahead.max(axis=1, keepdims=True) - ahead[-1].max() + behind
    weight = noise_weights(target, frequency)
    return ChainCost(
        peak=math.exp(max(0.0, float(np.max(gain)))),
        noise=float(np.sum(np.exp(2 * gain) @ weight)),
    )


def search_frequencies(target: TransferFunction) -> Real:
    """About `FEW_FREQUENCIES` out of the frequencies of interest, ascending [Hz].

    From `BEYOND_ROOTS` below the lowest root to as far above the highest, the middle of every
    resonance among them; with a pole at the origin from `BELOW_ROOTS_WITH_INTEGRATOR` below the
    lowest other root.
    """
    corners = _corners(target)
    below = BELOW_ROOTS_WITH_INTEGRATOR if target.poles_at_origin else BEYOND_ROOTS
    low, high = min(corners) / below, max(corners) * BEYOND_ROOTS
    grid = frequencies_of_interest(target, from_hz=low)
    grid = grid[grid <= high]
    thinned = grid[:: max(1, round(grid.size / FEW_FREQUENCIES))]
    middles = [p.natural_frequency / (2 * np.pi) for p in target.pole_factors if p.degree == 2]
    # Out of the grid, which keeps away from pairs on the imaginary axis.
    nearest = [grid[np.argmin(np.abs(grid - f))] for f in middles]
    return np.union1d(thinned, nearest)


def _corners(target: TransferFunction) -> list[float]:
    """Frequencies of the roots away from the origin [Hz], or 1 Hz where there is none."""
    factors = (*target.pole_factors, *target.zero_factors)
    return [f.natural_frequency / (2 * np.pi) for f in factors if f.natural_frequency] or [1.0]


def noise_weights(target: TransferFunction, frequency: Real) -> Real:
    """Weights whose sum with a function is its mean over the noise band (trapezoids)."""
    beyond = 1.0 if target.relative_degree else NOISE_BEYOND_ROOTS
    inside = frequency[frequency <= max(_corners(target)) * beyond * (1 + ROUNDING)]
    edges = np.concatenate([inside[:1], (inside[1:] + inside[:-1]) / 2, inside[-1:]])
    weights = np.zeros(frequency.size)
    weights[: inside.size] = np.diff(edges) / (inside[-1] - inside[0])
    return weights


Parts = tuple[Sequence[Factor], Sequence[Factor]]


def log_sizes(parts: Sequence[Parts], frequency: Real) -> Real:
    """ln |zeros / poles| of each (poles, zeros), shape (parts, F)."""
    s = np.asarray(2j * np.pi * frequency, dtype=np.complex128)

    def logs(factors: Sequence[Factor]) -> Real:
        zero = np.zeros(frequency.size)
        return sum((np.log(np.maximum(np.abs(f.at(s)), TINY)) for f in factors), zero)

    return np.array([logs(zeros) - logs(poles) for poles, zeros in parts])
