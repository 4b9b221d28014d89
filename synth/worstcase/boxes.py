"""Boxes of parts that the search for a bound still has to look into."""

from __future__ import annotations

import heapq
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.worstcase.enclosure import Enclosure
from synth.worstcase.expansion import Expansion, Parts
from synth.worstcase.groups import independent_groups

__all__ = ["Box", "Pair", "Start", "Taken", "at_once", "divided"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Box = tuple[Real, Real]
"""Smallest and largest multiple of every variable, shapes (V,)."""

ENTRIES = 200_000
"""Entries of the largest array of a batch."""


@dataclass(frozen=True, eq=False)
class Taken:
    """A box of a group taken up: no board of it has a larger error than `bound`, `level` is the
    care with which it is to be looked at next."""

    group: int
    bound: float
    low: Real
    high: Real
    level: int


@dataclass(frozen=True, eq=False)
class Start:
    """The whole box, expanded about its centre at every frequency."""

    parts: Parts
    s: Complex
    box: Box
    expansion: Expansion
    groups: tuple[NDArray[np.intp], ...]

    @classmethod
    def of(cls, parts: Parts, s: Complex) -> Start:
        """That of `parts` at the samples `s` (F,) [rad/s]."""
        low, high = parts.box
        step = at_once(parts.active.size**2)
        chunks = [
            parts.expand(s[k : k + step], np.tile((low + high) / 2, (s[k : k + step].size, 1)))
            for k in range(0, s.size, step)
        ]
        joined = (
            np.concatenate([getattr(c, name) for c in chunks])
            for name in ("response", "denominator", "numerator")
        )
        expansion = Expansion(*joined)
        return cls(parts, s, (low, high), expansion, independent_groups(expansion))

    def box_of(self, group: int) -> Box:
        """The whole box of one group, all other parts in the middle."""
        low, high = self.box
        own = np.zeros(low.size, dtype=bool)
        own[self.groups[group]] = True
        middle = (low + high) / 2
        return np.where(own, low, middle), np.where(own, high, middle)


class Pair:
    """The boxes of every group at one frequency for one sign of the error.

    `offset` is the error of the centre of the whole box, `best` what each group is known to
    add to it, with a board of its own, and `total` what all together cannot pass.
    """

    def __init__(
        self, place: int, sign: int, offset: float, start: Start, bounds: list[float]
    ) -> None:
        self.place, self.sign, self.offset = place, sign, offset
        low, high = start.box
        centre = (low + high) / 2
        self.best = [0.0] * len(bounds)
        self.boards = [centre] * len(bounds)
        self._made = 0
        self._open: list[list[tuple[float, int, Box | None, int]]] = [
            [(-b, 0, None, 0)] for b in bounds
        ]
        self._start = start

    @property
    def total(self) -> float:
        """No board has a larger error."""
        found = self.offset + sum(-boxes[0][0] for boxes in self._open)
        return math.inf if math.isnan(found) else found

    def take(self) -> Taken:
        """The most doubtful box, out of the open ones."""
        gaps = [-boxes[0][0] - best for boxes, best in zip(self._open, self.best, strict=True)]
        group = int(np.argmax(gaps))
        bound, _, box, level = heapq.heappop(self._open[group])
        low, high = box if box is not None else self._start.box_of(group)
        return Taken(group, -bound, low, high, level)

    def put(self, group: int, bound: float, box: Box, level: int) -> None:
        """Add a box of a group, to be looked at with so much care."""
        self._made += 1
        heapq.heappush(self._open[group], (-bound, self._made, box, level))

    def note(self, group: int, gain: float, board: Real) -> None:
        """A board, and what the parts of a group add to the error on it."""
        if gain > self.best[group]:
            self.best[group], self.boards[group] = gain, board


def divided(low: Real, high: Real, found: Enclosure, k: int) -> list[Box]:
    """Smaller boxes that hold the worst board of this one."""
    slope = np.where(high > low, found.slope[k], 0.0)
    if slope.any():
        return [(np.where(slope > 0, high, low), np.where(slope < 0, low, high))]
    part = int(np.argmax(found.doubt[k]))
    if not high[part] > low[part]:
        return [(low, high)]
    middle = (low[part] + high[part]) / 2
    below, above = high.copy(), low.copy()
    below[part] = above[part] = middle
    return [(low, below), (above, high)]


def at_once(entries: int) -> int:
    """Samples whose arrays of so many entries may be made at once."""
    return max(1, ENTRIES // max(1, entries))
