"""Percentiles of many rows of numbers that come block by block, in memory that hardly grows.

The first numbers of each row are kept.  Once there are enough of them they say, up to chance,
between which two values a percentile of the whole row will lie: from then on what lies below is
counted, what lies between is kept and the rest is let go, and the two values are drawn closer
whenever the space for what lies between is used up.  At the end the rank of the percentile either
falls on what was kept, and the result is that of all numbers, exactly; or the row is named as
lost, to be done in another way.  Chance loses a row about once in 1e11; rows of which many
numbers are equal or no numbers, and rows whose numbers drift, are lost more often.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["SHARES", "RowPercentiles", "percentiles_of_rows"]

Real = NDArray[np.float64]
Single = NDArray[np.float32]
Index = NDArray[np.intp]

SHARES = (0.05, 0.95)
"""The percentiles that are taken, as ratios."""

STORE = 100_000_000
"""Most bytes of the first numbers of all rows."""

FIRST, LEAST = 16_384, 1000
"""First numbers kept of each row, where they fit into `STORE`, and how many are kept anyway."""

SIGMAS = 7.0
"""Standard deviations of the rank of a percentile between which it is sought: beyond them lies one
in 4e11."""

ROOM = 2.0
"""Space for what lies between two values, in multiples of what they hold after the last number."""


class RowPercentiles:
    """The percentiles `SHARES` of rows of numbers.

    Parameters
    ----------
    rows
        How many.
    total
        How many numbers each row will have.
    block
        Most numbers of a row that come at once.
    """

    def __init__(self, rows: int, total: int, block: int) -> None:
        self._total, self._block = total, block
        first = max(LEAST, min(FIRST, STORE // (4 * rows)))
        self._first: Single | None = np.empty((rows, min(total, first + block)), dtype=np.float32)
        self._enough = first
        self._seen = 0
        self._windows: list[_Window] = []

    def add(self, numbers: Single) -> None:
        """The next numbers of every row, shape (rows, numbers)."""
        count = numbers.shape[1]
        if self._first is not None:
            self._first[:, self._seen : self._seen + count] = numbers
        self._seen += count
        if self._first is None:
            for window in self._windows:
                window.add(numbers, self._seen)
        elif self._seen >= self._enough and self._seen < self._total:
            kept = self._first[:, : self._seen]
            self._windows = [_Window.of(kept, s, self._total, self._block) for s in SHARES]
            self._first = None

    def found(self) -> tuple[Real, Index]:
        """Percentiles, shape (2, rows), and the rows that are lost, whose percentiles are NaN."""
        if self._first is not None:
            return percentiles_of_rows(self._first[:, : self._seen]), np.empty(0, dtype=np.intp)
        values = np.array([window.percentiles(self._seen) for window in self._windows])
        lost = np.array([window.lost for window in self._windows]).any(axis=0)
        return values, np.flatnonzero(lost)


def percentiles_of_rows(rows: Single) -> Real:
    """The percentiles `SHARES` of every row, linear between neighbours; shape (2, rows).

    Partitions the rows in place, so that it needs no memory of its own.  What is no number counts
    as larger than any.
    """
    ranks = [_Rank.of(share, rows.shape[1]) for share in SHARES]
    rows.partition(sorted({k for r in ranks for k in (r.low, r.high)}), axis=1)
    return np.array([r.between(rows[:, r.low], rows[:, r.high]) for r in ranks])


@dataclass(frozen=True)
class _Rank:
    """Where a percentile lies among numbers in order: between two neighbours, at a fraction."""

    low: int
    high: int
    fraction: float

    @classmethod
    def of(cls, share: float, count: int) -> _Rank:
        last = count - 1
        low = int(share * last)
        return cls(low, min(low + 1, last), share * last - low)

    def between(self, low: Single, high: Single) -> Real:
        a, b = low.astype(float), high.astype(float)
        with np.errstate(invalid="ignore"):
            return np.where(a == b, a, a + (b - a) * self.fraction)


class _Window:
    """Of every row, what lies from `low` to `high`, and how much lies below."""

    def __init__(self, share: float, kept: Single, held: Index, below: Index) -> None:
        self._share = share
        self._kept, self._held, self._below = kept, held, below
        self._low = np.empty(held.size, dtype=np.float32)
        self._high = np.empty(held.size, dtype=np.float32)
        self.lost = np.zeros(held.size, dtype=bool)

    @classmethod
    def of(cls, first: Single, share: float, total: int, block: int) -> _Window:
        """The window that the first numbers of the rows tell; reorders them."""
        rows, seen = first.shape
        room = int(ROOM * 2 * _reach(share, total)) + 2 * block
        made = cls(
            share,
            np.empty((rows, room), dtype=np.float32),
            np.zeros(rows, dtype=np.intp),
            np.zeros(rows, dtype=np.intp),
        )
        for row in range(rows):
            made._narrow(row, first[row], seen)
        return made

    def add(self, numbers: Single, seen: int) -> None:
        """The next numbers of every row; `seen` of each have come with them."""
        low, high = self._low[:, None], self._high[:, None]
        self._below += np.count_nonzero(numbers < low, axis=1)
        row, place = divmod(
            np.flatnonzero((numbers >= low) & (numbers <= high)), max(numbers.shape[1], 1)
        )
        count = np.bincount(row, minlength=self._held.size)
        start = np.cumsum(count) - count
        self._kept[row, (self._held - start)[row] + np.arange(row.size)] = numbers[row, place]
        self._held += count
        room = self._kept.shape[1] - numbers.shape[1]
        if (self._held > room).any():
            for k in np.flatnonzero(~self.lost).tolist():
                self._narrow(k, self._kept[k, : self._held[k]], seen)
            self._give_up(self._held > room)

    def percentiles(self, seen: int) -> Real:
        """Of the rows, NaN where they are lost."""
        rank = _Rank.of(self._share, seen)
        missed = (self._below > rank.low) | (self._below + self._held <= rank.high)
        self._give_up(missed)
        pairs = np.full((self._held.size, 2), np.nan, dtype=np.float32)
        for k in np.flatnonzero(~self.lost).tolist():
            kept = self._kept[k, : self._held[k]]
            ends = [rank.low - self._below[k], rank.high - self._below[k]]
            pairs[k] = np.partition(kept, sorted(set(ends)))[ends]
        return rank.between(pairs[:, 0], pairs[:, 1])

    def _narrow(self, row: int, kept: Single, seen: int) -> None:
        """Keep of `kept` what lies around the percentile of the `seen` numbers so far."""
        middle, reach = self._share * seen, _reach(self._share, seen)
        last = kept.size - 1
        ends = [
            min(max(int(rank) - int(self._below[row]), 0), last)
            for rank in (middle - reach, middle + reach)
        ]
        kept.partition(sorted(set(ends)))
        low, high = kept[ends]
        if not (np.isfinite(low) and np.isfinite(high)):
            self._give_up(np.arange(self._held.size) == row)
            return
        self._below[row] += np.count_nonzero(kept < low)
        inside = kept[(kept >= low) & (kept <= high)]
        if inside.size > self._kept.shape[1]:
            self._give_up(np.arange(self._held.size) == row)
            return
        self._kept[row, : inside.size] = inside
        self._held[row] = inside.size
        self._low[row], self._high[row] = low, high

    def _give_up(self, rows: NDArray[np.bool_]) -> None:
        """Keep nothing of these rows any more."""
        self.lost |= rows
        self._held[rows] = 0
        self._low[rows] = self._high[rows] = np.nan


def _reach(share: float, count: int) -> float:
    """How far the rank of a percentile may lie from where it is expected, among `count`."""
    return SIGMAS * math.sqrt(count * share * (1 - share)) + 2
