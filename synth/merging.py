"""Adders folded into the summing nodes that read them, where that saves op-amps.

Every cell sums, so an adder can go if each of its readers takes the adder's terms, weights
multiplied, and merges them with its own.  H(s) stays what it was, and so does every other
signal.  Of all subsets of the adders, the output left out, the one with the fewest op-amps,
that is blocks and inverters by `synth.polarity`, is taken; then the one with the fewest
resistors; then the one with the fewest folds.  Beyond `MOST_ENUMERATED` adders the search is
greedy, by the same measure.

What a fold costs.  Term t of block i contributes S_t = g_i w_t v_t / H to ln H, with g_i the
transfer from i's summing node to the output: a weight off by a part in a hundred moves ln H by
S_t / 100.  Folding changes neither g nor v of the blocks that stay.

- An adder read once, by a term of weight w: its inputs had S = g_i w k_j v_j, and have the same
  in the reader.  As many weights are independent as before; what w and the adder's feedback
  added is gone, and terms that merge add up to no more than they were.  The subtraction has
  only moved, so such a fold never costs accuracy, however much the adder's terms cancel.
- An adder read several times: each read gets parts of its own.  In place of one |g_i w_i v_a|
  it has sum_j |g_i w_i k_j v_j|, larger by the cancellation sum_j |k_j v_j| / |v_a|, and their
  errors no longer are the same in every read.  A high-pass output u - x, which a loop keeps
  small because all read the same adder, would so lose its zeros at the origin.

So the sum of |S_t| over all terms and feedback parts, the largest error per unit of tolerance
to first order, is compared over frequency before and after: it may not grow by more than
`LARGEST_GROWTH` anywhere.  The cancellation bounds it, and it sees besides whether an error
counts at the output at all, and what merging gives back.
"""

from __future__ import annotations

import itertools
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.errors import GraphError
from synth.graph import INPUT, Block, BlockGraph, Term, merged_terms
from synth.polarity import choose_polarity

__all__ = ["LARGEST_GROWTH", "exposure", "folded", "merge_adders"]

Real = NDArray[np.float64]

# By how much the error from tolerance may grow anywhere, to first order (a ratio).  A tenth is
# less than one form differs from the next, and most adders that can go at all go within it.
LARGEST_GROWTH = 1.1

# Up to this many adders all subsets are tried, at most 64; beyond, the best single fold is taken
# again and again, which may end above the least.  A subset costs a choice of signs, up to ten
# milliseconds where many terms cross, so this keeps the search well below a second.
MOST_ENUMERATED = 6

# Weights that merge to less than this share of their sizes have cancelled but for rounding: no
# part could carry what is left.
ROUNDING = 1e-9


def folded(graph: BlockGraph, names: Collection[str]) -> BlockGraph:
    """The graph without the adders `names`, each reader with their terms in place.

    Terms that merge carry the texts of all, a folded one with what it comes from.

    Raises
    ------
    GraphError
        A name that is no adder or is the output, or a reader whose terms cancel.
    """
    if not names:
        return graph
    for name in names:
        if name == graph.output or name not in graph.by_name or graph.by_name[name].is_integrator:
            raise GraphError(f"got {name!r} to fold, expected an adder that is not the output")
    # In the order of the adders: what one reads comes before it.
    spread: dict[str, tuple[Term, ...]] = {}
    for name in (n for n in graph.adder_order if n in names):
        spread[name] = _spread(graph.by_name[name], spread)
    kept = (b for b in graph.blocks if b.name not in spread)
    return replace(graph, blocks=tuple(replace(b, terms=_spread(b, spread)) for b in kept))


def merge_adders(
    graph: BlockGraph,
    frequency_hz: ArrayLike,
    *,
    inverted: str = "no",
    largest_growth: float = LARGEST_GROWTH,
) -> BlockGraph:
    """The equal graph with the fewest op-amps that folding reaches at no cost in accuracy.

    Parameters
    ----------
    frequency_hz
        Where the cost in accuracy is looked at, shape (F,) [Hz]; wider than the band, since
        stop-bands count.
    inverted
        As in `choose_polarity`.
    largest_growth
        What the error from tolerance may grow by at any of the frequencies.
    """
    adders = tuple(b.name for b in graph.adders if b.name != graph.output)
    if not adders:
        return graph
    s = 2j * np.pi * np.asarray(frequency_hz, dtype=float)
    search = _Search(graph, s, inverted, largest_growth)
    if len(adders) > MOST_ENUMERATED:
        return search.greedy(adders).graph
    sizes = range(len(adders), 0, -1)
    return search.best(c for k in sizes for c in itertools.combinations(adders, k)).graph


@dataclass(frozen=True)
class _Folded:
    """A graph after folding, and what it costs: op-amps, resistors, and folds to break a tie."""

    graph: BlockGraph
    cost: tuple[int, int, int]


@dataclass(frozen=True, eq=False)
class _Search:
    """Folds of one graph; no fold changes its signals, or its gains of what stays."""

    graph: BlockGraph
    s: NDArray[np.complex128]
    inverted: str
    largest_growth: float

    @cached_property
    def _sizes(self) -> tuple[dict[str, Real], dict[str, Real]]:
        return _signals_and_gains(self.graph, self.s)

    @cached_property
    def _allowed(self) -> Real:
        return self.largest_growth * _exposure(self.graph, *self._sizes, self.s)

    def best(self, subsets: Iterator[tuple[str, ...]]) -> _Folded:
        """The cheapest of the subsets, which come with the largest first, and of no fold."""
        best = self.costed(())
        count = len(self.graph.blocks)
        for names in subsets:
            # Without a single inverter this many op-amps are left, and all that follow have more.
            if count - len(names) > best.cost[0]:
                break
            found = self.fold(names)
            if found is not None and found.cost < best.cost:
                best = found
        return best

    def greedy(self, adders: tuple[str, ...]) -> _Folded:
        """One fold more at a time, the cheapest, while it gets cheaper."""
        names: tuple[str, ...] = ()
        best = self.costed(names)
        while True:
            trials = [(self.fold((*names, a)), (*names, a)) for a in adders if a not in names]
            found = [(f, more) for f, more in trials if f is not None and f.cost < best.cost]
            if not found:
                return best
            best, names = min(found, key=lambda pair: pair[0].cost)

    def fold(self, names: tuple[str, ...]) -> _Folded | None:
        """The graph without these adders; None where that costs accuracy or cannot be."""
        try:
            found = folded(self.graph, names)
        except GraphError:
            return None
        if np.any(_exposure(found, *self._sizes, self.s) > self._allowed):
            return None
        return self.costed(names, found)

    def costed(self, names: tuple[str, ...], graph: BlockGraph | None = None) -> _Folded:
        """The graph after folding `names`, by default none, with what it costs."""
        graph = self.graph if graph is None else graph
        inverters = len(choose_polarity(graph, inverted=self.inverted).inverters)
        resistors = sum(len(b.terms) for b in graph.blocks) + len(graph.adders) + 2 * inverters
        return _Folded(graph, (len(graph.blocks) + inverters, resistors, len(names)))


def exposure(graph: BlockGraph, frequency_hz: ArrayLike) -> Real:
    """Sum of |S_t| over every term and every feedback part, times |H|; shape (F,).

    The largest change of H per unit of relative tolerance of all parts, to first order,
    inverters left out.
    """
    s = 2j * np.pi * np.asarray(frequency_hz, dtype=float)
    return _exposure(graph, *_signals_and_gains(graph, s), s)


def _signals_and_gains(
    graph: BlockGraph, s: NDArray[np.complex128]
) -> tuple[dict[str, Real], dict[str, Real]]:
    """|v| of every source and the gain from every block's signal to the output."""
    signals = {INPUT: np.ones(s.shape)} | {n: np.abs(v) for n, v in graph.signals(s).items()}
    return signals, {n: np.abs(g) for n, g in graph.injections(s).items()}


def _exposure(
    graph: BlockGraph, signals: dict[str, Real], gains: dict[str, Real], s: NDArray[np.complex128]
) -> Real:
    total = np.zeros(s.shape)
    for block in graph.blocks:
        summed = sum(
            (abs(float(t.weight)) * signals[t.source] for t in block.terms), np.zeros(s.shape)
        )
        within = summed / np.abs(s) if block.is_integrator else summed
        total = total + gains[block.name] * (within + signals[block.name])
    return total


def _spread(block: Block, spread: Mapping[str, tuple[Term, ...]]) -> tuple[Term, ...]:
    """The terms of `block`, those that read an adder in `spread` replaced by its terms."""
    if not any(t.source in spread for t in block.terms):
        return block.terms
    terms: list[Term] = []
    for term in block.terms:
        if term.source not in spread:
            terms.append(term)
        for part in spread.get(term.source, ()):
            text = f"{term.sets} ({part.source} part of {term.source})" if term.sets else ""
            terms.append(Term(part.source, term.weight * part.weight, text))
    texts: dict[str, list[str]] = {}
    sizes: dict[str, float] = {}
    for term in terms:
        texts.setdefault(term.source, []).append(term.sets)
        sizes[term.source] = max(sizes.get(term.source, 0.0), abs(float(term.weight)))
    summed = merged_terms(terms)
    if any(abs(float(t.weight)) < ROUNDING * sizes[t.source] for t in summed):
        raise GraphError(f"block {block.name}: weights cancel but for rounding")
    return tuple(replace(t, sets=" + ".join(x for x in texts[t.source] if x)) for t in summed)
