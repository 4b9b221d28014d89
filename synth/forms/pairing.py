"""Which zeros stand beside which poles, and in what order, found by an exact search.

What best means is said in `synth.forms.chains`: the least of the largest c_k, and among all
chains within `EQUAL_PEAKS` of it the least noise.

A partial product T_k depends on which factors it holds and not on their order.  The first
question is therefore a bottleneck path, the second a shortest path, over pairs (subset of the
poles, subset of the zeros), from nothing to everything: dynamic programming, which gives what
trying all pairings and all orders would.  The factors of H / T_k are the others, so one table
of maxima serves both peaks, and equal factors count once.

Any real zero, any two of them, or a pair of zeros may go to a pair of poles, and a real zero to
a real pole.  Only where pairs of zeros outnumber the pairs of poles do real poles join, two in
a section with a pair of zeros, and then every pair of poles holds one too: a joined section has
its real poles from sums, at a cost in noise and scatter that this search does not see.

Should the table be larger than `LARGEST_TABLE`, which takes more than nine different real poles
and zeros each, then real zeros are first given to real poles, the nearest two at a time and no
more than needed; the rest of the search stays exact.  It is meant for the orders a board can
have, up to twelve (`synth.targets.bounds`).
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations, combinations_with_replacement
from typing import Generic, TypeVar

import numpy as np
from numpy.typing import NDArray

from synth.forms.chains import (
    ROUNDING,
    TINY,
    Section,
    chain_cost,
    log_sizes,
    noise_weights,
    search_frequencies,
)
from synth.transfer import Factor, TransferFunction

__all__ = ["EQUAL_PEAKS", "LARGEST_TABLE", "best_chain", "customary", "sections"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]
T = TypeVar("T")

# Chains whose largest peaks differ by less than this ratio, 1 dB, are told apart by their noise.
# Levels of a circuit stay about as far below their ceilings; over 120 random targets, ratios
# from 1 to 1.4 gave circuits whose noise agreed on average to 2 %.
EQUAL_PEAKS = 1.12

# A chain whose noise is above the least by no more than this ratio is as good: 0.4 dB, less than
# what the levels within the sections decide, which this search does not see.
EQUAL_NOISE = 1.1

# Subsets of poles times subsets of zeros.
LARGEST_TABLE = 2**18


def sections(target: TransferFunction) -> list[Section]:
    """Poles and zeros paired and put in order, the best chain there is (see the module), or the
    same sections by rising Q where that is as good.

    The order of the factors within `target` does not matter.  It takes at most 10 ms at order
    6, 50 ms at order 8, 0.8 s at order 12, and a tenth of that as a rule.
    """
    return customary(target, best_chain(target))


def best_chain(target: TransferFunction) -> list[Section]:
    """The chain with the least noise among those with the least peak."""
    return _Search(target).chain()


def customary(target: TransferFunction, chain: list[Section]) -> list[Section]:
    """The sections by rising Q, as is common practice, where that costs about as little as
    `chain`; otherwise `chain` itself."""
    rising = sorted(chain, key=lambda s: (s.q, s.frequency))
    before, after = chain_cost(target, chain), chain_cost(target, rising)
    as_good = after.peak <= before.peak * EQUAL_PEAKS and after.noise <= before.noise * EQUAL_NOISE
    return rising if as_good else chain


@dataclass(frozen=True)
class _Item:
    """A pole factor as the search moves it about, with the real zero fixed to it if any."""

    pole: Factor
    zeros: tuple[Factor, ...] = ()

    @property
    def room(self) -> int:
        return self.pole.degree - len(self.zeros)


class _Subsets(Generic[T]):
    """All multisets that can be taken from things of which some are equal.

    Row k of `digits` says how many of each of `kinds` subset k holds.  Rows ascend by `degree`
    if asked; a subset's complement is always its mirror image in the order of the rows, and a
    subset comes after those it contains.
    """

    def __init__(self, things: Sequence[T], degree: Callable[[T], int], *, by_degree: bool) -> None:
        counted = Counter(things)
        self.kinds: tuple[T, ...] = tuple(counted)
        counts = np.array([counted[k] for k in self.kinds], dtype=np.intp)
        self._strides = np.concatenate([[1], np.cumprod(counts + 1)]).astype(np.intp)
        self.size = int(self._strides[-1])
        plain = np.arange(self.size, dtype=np.intp)
        digits = plain[:, None] // self._strides[:-1] % (counts + 1)
        degrees = digits @ np.array([degree(k) for k in self.kinds], dtype=np.intp)
        order = np.argsort(degrees, kind="stable") if by_degree else plain
        self.digits: Index = digits[order]
        self.degree: Index = degrees[order]
        self._plain = order
        self._row = np.empty_like(order)
        self._row[order] = plain

    def without(self, taken: Sequence[int]) -> Index:
        """Row of every subset less one of each kind `taken`; `size` where it has not so many."""
        less = np.bincount(np.array(taken, dtype=np.intp), minlength=len(self.kinds))
        enough = np.all(self.digits >= less, axis=1)
        plain = self._plain - int(less @ self._strides[:-1])
        return np.where(enough, self._row[np.where(enough, plain, 0)], self.size)


def _table_size(items: Sequence[_Item], zeros: Sequence[Factor]) -> int:
    return math.prod(n + 1 for things in (items, zeros) for n in Counter(things).values())


def _canonical(factor: Factor) -> tuple[object, ...]:
    """A key that sorts factors in the same order whatever order they are given in."""
    return factor.natural_frequency, factor.degree, factor.coefficients


def _within_limit(target: TransferFunction) -> tuple[list[_Item], list[Factor]]:
    """Items and free zeros, with as many real zeros fixed to real poles as it takes.

    Of the real poles enough stay free for pairs of zeros to join, since H is proper.
    """
    items = [_Item(p) for p in sorted(target.pole_factors, key=_canonical)]
    zeros = sorted(target.zero_factors, key=_canonical)
    while _table_size(items, zeros) > LARGEST_TABLE:
        poles = [i for i in items if i.pole.degree == 1 and not i.zeros]
        single = [z for z in zeros if z.degree == 1]
        if not single or not poles:
            break
        item, zero = min(
            ((i, z) for i in poles for z in single), key=lambda p: _distance(p[0].pole, p[1])
        )
        items[items.index(item)] = _Item(item.pole, (zero,))
        zeros.remove(zero)
    return items, zeros


def _pairs_without_poles(target: TransferFunction) -> int:
    """How many more pairs of zeros than pairs of poles there are."""
    pairs = [sum(f.degree == 2 for f in fs) for fs in (target.zero_factors, target.pole_factors)]
    return pairs[0] - pairs[1]


def _distance(pole: Factor, zero: Factor) -> float:
    """Distance of two real roots: of their frequencies in ln."""
    a, b = (math.log(max(f.natural_frequency, TINY)) for f in (pole, zero))
    return abs(a - b)


class _Search:
    """The tables of one target.  States are (row of pole subsets, row of zero subsets)."""

    def __init__(self, target: TransferFunction) -> None:
        items, zeros = _within_limit(target)
        self._joins = _pairs_without_poles(target) > 0
        self.frequency = search_frequencies(target)
        self.weight = noise_weights(target, self.frequency)
        self.poles = _Subsets(items, lambda i: i.room, by_degree=False)
        self.zeros = _Subsets(zeros, lambda z: z.degree, by_degree=True)
        of_items = log_sizes([((i.pole,), i.zeros) for i in self.poles.kinds], self.frequency)
        of_zeros = log_sizes([((), (z,)) for z in self.zeros.kinds], self.frequency)
        self.pole_logs: Real = self.poles.digits @ of_items
        self.zero_logs: Real = self.zeros.digits @ of_zeros.reshape(-1, self.frequency.size)

    def chain(self) -> list[Section]:
        """The best chain."""
        lost = self._lost_range()
        worst = self._forward(lost, np.maximum)[:, :-1]
        within = worst[-1, -1] + math.log(EQUAL_PEAKS)
        # A chain read backwards runs through the complements and loses the same.
        lost[np.maximum(worst, worst[::-1, ::-1]) > within] = np.inf
        return self._trace(self._forward(self._noise(lost), np.add))

    @cached_property
    def _peaks(self) -> Real:
        """ln max|T| of every state, inf where zeros could not be held or what is left could
        not be; shape (poles, zeros)."""
        spare = int(self.poles.degree[-1] - self.zeros.degree[-1])
        first = np.searchsorted(self.zeros.degree, self.poles.degree - spare, side="left")
        last = np.searchsorted(self.zeros.degree, self.poles.degree, side="right")
        table = np.full((self.poles.size, self.zeros.size), np.inf)
        for row, (start, stop) in enumerate(zip(first, last, strict=True)):
            table[row, start:stop] = (self.zero_logs[start:stop] + self.pole_logs[row]).max(axis=1)
        return table

    def _lost_range(self) -> Real:
        """ln c of every state; inf where it is no partial product of a chain."""
        lost = self._peaks + self._peaks[::-1, ::-1] - self._peaks[-1, -1]
        return np.asarray(np.maximum(lost, 0.0))

    def _noise(self, lost: Real) -> Real:
        """Mean of n^2 of every state where `lost` is finite, elsewhere inf."""
        noise = np.full_like(lost, np.inf)
        rows, columns = np.nonzero(np.isfinite(lost))
        inside = self.weight > 0
        weight, peaks = self.weight[inside], self._peaks
        # The complement of a state, H / T, is its mirror image.
        poles, zeros = self.pole_logs[::-1, inside], self.zero_logs[::-1, inside]
        for part in np.array_split(np.arange(rows.size), max(1, rows.size // 2**14)):
            p, z = rows[part], columns[part]
            gain = poles[p] + zeros[z] + (peaks[p, z] - peaks[-1, -1])[:, None]
            noise[p, z] = np.exp(2 * gain) @ weight
        return noise

    @cached_property
    def _held(self) -> dict[str, tuple[list[tuple[int, ...]], Index]]:
        """By kind of section: the sets of zeros it may hold, and the row of every subset of
        zeros less each, shape (sets, zeros)."""
        single = [k for k, z in enumerate(self.zeros.kinds) if z.degree == 1]
        ones: list[tuple[int, ...]] = [(k,) for k in single]
        pair: list[tuple[int, ...]] = [
            (k,) for k, z in enumerate(self.zeros.kinds) if z.degree == 2
        ]
        twos = list(combinations_with_replacement(single, 2))
        sets: dict[str, list[tuple[int, ...]]] = {
            "fixed": [()],
            "real": [(), *ones],
            "pair": pair if self._joins else [(), *ones, *twos, *pair],
            "joined": pair if self._joins else [],
        }
        return {
            kind: (held, np.array([self.zeros.without(h) for h in held], dtype=np.intp))
            for kind, held in sets.items()
            if held
        }

    @cached_property
    def _taken(self) -> dict[str, tuple[list[tuple[int, ...]], Index]]:
        """By kind of section: the poles it may have, and the row of every subset of poles less
        each, shape (choices, poles)."""
        kinds = self.poles.kinds
        real = [k for k, i in enumerate(kinds) if i.pole.degree == 1 and not i.zeros]
        choices: dict[str, list[tuple[int, ...]]] = {
            "fixed": [(k,) for k, i in enumerate(kinds) if i.zeros],
            "real": [(k,) for k in real],
            "pair": [(k,) for k, i in enumerate(kinds) if i.pole.degree == 2],
            "joined": [*((k, k) for k in real), *combinations(real, 2)],
        }
        return {
            kind: (taken, np.array([self.poles.without(t) for t in taken], dtype=np.intp))
            for kind, taken in choices.items()
            if taken and kind in self._held
        }

    def _forward(self, cost: Real, together: Callable[[Real, Real], Real]) -> Real:
        """Least cost of a chain up to every state, of the costs of its states put `together`;
        shape (poles, zeros + 1), the last column inf."""
        value = np.full((self.poles.size, self.zeros.size + 1), np.inf)
        value[0, 0] = 0.0
        # By kind: the least of `value` over the sets of zeros a section may add.
        least = {kind: np.full(cost.shape, np.inf) for kind in self._taken}
        count = self.poles.digits.sum(axis=1)
        for level in range(int(count[-1]) + 1):
            rows = np.nonzero(count == level)[0]
            if level:
                best = np.full((rows.size, self.zeros.size), np.inf)
                for kind, (_, before) in self._taken.items():
                    for earlier in before[:, rows]:
                        there = np.nonzero(earlier < self.poles.size)[0]
                        best[there] = np.minimum(best[there], least[kind][earlier[there]])
                value[rows, :-1] = together(best, cost[rows])
            here = value[rows]
            for kind, table in least.items():
                for less in self._held[kind][1]:
                    table[rows] = np.minimum(table[rows], here[:, less])
        return value

    def _trace(self, value: Real) -> list[Section]:
        """The chain that `value` stands for, read from its end."""
        chain: list[Section] = []
        row, column = self.poles.size - 1, self.zeros.size - 1
        while row:
            options: list[tuple[float, str, int, int]] = []
            for kind, (_, before) in self._taken.items():
                choices = np.nonzero(before[:, row] < self.poles.size)[0]
                less = self._held[kind][1][:, column]
                reached = value[before[choices, row][:, None], less]
                options += [
                    (float(reached[i, j]), kind, int(choice), j)
                    for i, choice in enumerate(choices)
                    for j in range(len(less))
                ]
            least = min(option[0] for option in options)
            _, kind, i, j = next(o for o in options if o[0] <= least * (1 + ROUNDING))
            taken, rows = self._taken[kind]
            held, columns = self._held[kind]
            items = [self.poles.kinds[k] for k in taken[i]]
            zeros = [
                *(z for item in items for z in item.zeros),
                *(self.zeros.kinds[k] for k in held[j]),
            ]
            chain.append(Section([item.pole for item in items], zeros))
            row, column = int(rows[i, row]), int(columns[j, column])
        return chain[::-1]
