"""The phase of a ratio over a box, numerator and denominator taken together.

Both lie in half-planes bounded by 0, so each phase alone is extreme at corners.  That the parts
which turn n also turn d is brought in slice by slice: if at every corner, with some r >= 0,

    Im(n e^-ja) <= r Im(d e^-jb),

then so it is at every board, both sides being multi-affine, and a board with arg d <= b has
arg n <= a.  Boards with arg d from b' to b so have a phase of at most a - b'.  For given b and r
the least such a follows corner by corner, as |n| sin(arg n - a) <= r Im(d e^-jb); the weak parts
of `synth.worstcase.corners` are added to the left side at their worst.
"""

from __future__ import annotations

import heapq
import itertools
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["Phases", "together"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Slices at first, how often the worst one is halved, and the share of the bound at which it is
# narrow enough.
SLICES = 6
HALVINGS = 24
NARROW = 0.01

# Values of r tried, against the usual ratio of n and d, on so many corners; all are checked after.
RATIOS = np.append(0.0, np.geomspace(1 / 32, 8, 17))
FINER = np.geomspace(0.8, 1.25, 5)
SAMPLE = 1024

# Rounds in which the weak parts are added, and what is then allowed for rounding [rad].
ROUNDS = 3
SPARE = 1e-9


class Values(Protocol):
    """A determinant at the corners, as `synth.worstcase.corners.Corners`."""

    @property
    def value(self) -> Complex:
        """Shape (N, M)."""

    @property
    def linear(self) -> Complex:
        """Shape (W, N, M)."""

    @property
    def rest(self) -> Real:
        """Shape (N, M)."""


@dataclass(frozen=True, eq=False)
class Phases:
    """Of a determinant over boxes: at the corners, (N, M); the highest and the lowest of any
    board, (N,); and whether a half-plane holds all, (N,)."""

    angle: Real
    high: Real
    low: Real
    held: NDArray[np.bool_]

    @classmethod
    def of(cls, found: Values) -> Phases:
        """Those of the corners found."""
        size, angle = np.abs(found.value), np.angle(found.value)
        back = (np.abs((found.linear / found.value).real)).sum(axis=0)
        across = (np.abs((found.linear / found.value).imag)).sum(axis=0)
        rest = found.rest / size
        ahead = 1 - back - rest
        swing = np.arctan2(across + rest, ahead)
        high, low = (angle + swing).max(axis=1), (angle - swing).min(axis=1)
        held = (ahead > 0).all(axis=1) & (high - low < np.pi)
        return cls(angle, high, low, np.asarray(held))


def together(over: Values, under: Values, ahead: Phases, behind: Phases, k: int) -> float:
    """The largest arg(over/under) of any board of box `k`, at most."""
    slices = _Slices(over, under, ahead, behind, k)
    edges = np.linspace(slices.lowest, slices.highest, SLICES + 1)
    heap: list[tuple[float, float, float, float]] = []
    for below, above in itertools.pairwise(edges):
        angle = slices.limit(float(above))
        heapq.heappush(heap, (-(angle - below), float(below), float(above), angle))
    for _ in range(HALVINGS):
        bound, below, above, angle = heap[0]
        if above - below < NARROW * abs(bound):
            break
        heapq.heappop(heap)
        middle = (below + above) / 2
        heapq.heappush(heap, (-(angle - middle), middle, above, angle))
        angle = slices.limit(middle)
        heapq.heappush(heap, (-(angle - below), below, middle, angle))
    return -heap[0][0]


class _Slices:
    """Box `k` of the module."""

    def __init__(self, over: Values, under: Values, ahead: Phases, behind: Phases, k: int) -> None:
        self.over, self.under = over.value[k], under.value[k]
        self.over_steps, self.under_steps = over.linear[:, k], under.linear[:, k]
        self.over_rest, self.under_rest = over.rest[k], under.rest[k]
        self.size, self.angle = np.abs(self.over), ahead.angle[k]
        self.lowest, self.highest = float(behind.low[k]), float(behind.high[k])
        self.largest, self.least = float(ahead.high[k]), float(ahead.low[k])
        usual = np.median(self.size) / np.median(np.abs(self.under))
        self.ratios = RATIOS * float(usual)
        order = np.argsort(-self.angle, kind="stable")
        half = order[: SAMPLE // 2]
        self.sample = np.append(half, order[:: max(1, order.size // (SAMPLE // 2))])

    def limit(self, b: float) -> float:
        """No board with arg d <= b has a larger arg n."""
        sine = (self.under * np.exp(-1j * b)).imag
        own = self.sample
        angle, share = self.angle[own], sine[own] / self.size[own]

        def best(ratios: Real) -> float:
            reach = np.arcsin(np.clip(ratios[:, None] * share, -1, 1))
            found = np.where(ratios[:, None] * share < -1, np.inf, angle - reach).max(axis=1)
            return float(ratios[np.argmin(found)])

        ratio = best(self.ratios)
        ratio = best(ratio * FINER)
        return min(self._checked(b, ratio, ratio * sine), self.largest)

    def _checked(self, b: float, ratio: float, right: Real) -> float:
        """The least a for `ratio`, by all corners and with the weak parts; inf where it fails."""
        rest = self.over_rest + ratio * self.under_rest
        other = (self.under_steps * (ratio * np.exp(-1j * b))).imag
        a, weak = -np.inf, rest
        for _ in range(ROUNDS + 1):
            spare = (right - weak) / self.size
            if (spare < -1).any():
                return np.inf
            reach = np.arcsin(np.minimum(spare, 1.0))
            a = max(a, float((self.angle - reach).max()) + SPARE)
            weak = np.abs((self.over_steps * np.exp(-1j * a)).imag - other).sum(axis=0) + rest
            if (self.size * np.sin(self.angle - a) + weak <= right).all():
                # Whatever board there is has its phase within half a turn below a.
                return a if self.largest - np.pi <= a <= self.least + np.pi else np.inf
        return np.inf
