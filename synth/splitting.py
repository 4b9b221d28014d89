"""Gains split over two stages, where in one stage no scaling fits the ranges of the parts.

Between source j and the blocks that read it with a weight out of range goes an adder with
that one input: j -> g -> i, weights 1 and w, so that w stays exact.  H(s) and all other signals
stay what they were, and the level of g is one more freedom of the scaling, which makes of 1
and w two moderate ratios.  Which of the two cells inverts is for `synth.polarity` to choose;
an inverter of j that only i needed so comes for nothing.

Which terms: the linear program of `synth.scaling.constraints` names the rows that contradict
each other.  To split any other term would leave that contradiction as it is, so only these are
tried, one at a time and all of one source together, and the graphs with the most room are kept
for the next round.  So where splitting one term is enough, it is found; more stages than one
are found by this beam search, not by trying all.  What no stage can mend is refused as before:
a signal that is a small difference of large ones stays below the rails only with large ratios.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property

from synth.fixing import FixedParts
from synth.graph import Block, BlockGraph, Term
from synth.job import Job
from synth.peaks import SignalPeaks
from synth.scaling.constraints import region
from synth.scaling.variables import Variables

__all__ = ["MOST_STAGES", "added_stages", "split_graphs", "through_stage"]

# Stages added at most: each is an op-amp, and a form that asks for more is the wrong one.
MOST_STAGES = 4

# Graphs kept from round to round.
BEAM = 4

# Room (of logarithms) that grows by less than this does not grow.
NO_BETTER = 1e-6

# What misses its limits by less than this, in ln, fits.
SLACK = 1e-9

NOTHING_FIXED = FixedParts()


def split_graphs(graph: BlockGraph, job: Job, peaks: SignalPeaks) -> Iterator[BlockGraph]:
    """Graphs equal to `graph` that fit the job's parts, by rising number of added stages.

    At most one for each number up to `MOST_STAGES`, the one with the most room, as long as more
    stages make more room.  Fixed values of the job are not looked at.

    Parameters
    ----------
    peaks
        Those of `graph`.
    """
    kept = [_Trial(graph, peaks, job)]
    for _ in range(MOST_STAGES):
        before = kept[0].room
        trials = [t for each in kept for t in each.further()]
        # Sorting is stable: of those with equal room, but for rounding, the first.
        kept = sorted(trials, key=lambda t: -round(t.room, 9))[:BEAM]
        if not kept or kept[0].room < before + NO_BETTER:
            return
        if kept[0].room >= -SLACK:
            yield _numbered(kept[0].graph, graph)


def added_stages(graph: BlockGraph, before: BlockGraph) -> tuple[Block, ...]:
    """The stages that splitting has added to `before`."""
    return tuple(b for b in graph.blocks if b.name not in before.by_name)


def through_stage(
    graph: BlockGraph, source: str, readers: tuple[str, ...], name: str
) -> BlockGraph:
    """The equal graph in which `readers` read `source` through a new adder `name`."""
    texts = "; ".join(t.sets for b, t in graph.readers(source) if b.name in readers)
    stage = Block(name, "adder", (Term(source, Fraction(1), texts),))
    blocks: list[Block] = []
    for block in graph.blocks:
        if block.name in readers and stage not in blocks:
            blocks.append(stage)
        blocks.append(_renamed(block, {source: name}) if block.name in readers else block)
    return replace(graph, blocks=tuple(blocks))


def _renamed(block: Block, names: Mapping[str, str]) -> Block:
    """`block` with its sources renamed."""
    terms = tuple(replace(t, source=names.get(t.source, t.source)) for t in block.terms)
    return replace(block, terms=terms)


def _numbered(graph: BlockGraph, before: BlockGraph) -> BlockGraph:
    """`graph` with its added stages numbered in order, and what their inputs set in words."""
    stages = added_stages(graph, before)
    free = [n for k in range(1, len(graph.blocks) + 1) if (n := f"g{k}") not in before.by_name]
    names = {b.name: n for b, n in zip(stages, free, strict=False)}
    blocks: list[Block] = []
    for block in graph.blocks:
        read = _renamed(block, names)
        if block in stages:
            (term,) = read.terms
            name = names[block.name]
            terms = (replace(term, sets=f"stage {name} for {term.sets}" if term.sets else ""),)
            read = Block(name, "adder", terms)
        blocks.append(read)
    return replace(graph, blocks=tuple(blocks))


@dataclass(frozen=True, eq=False)
class _Trial:
    """A graph with its peaks, and the room its parts leave."""

    graph: BlockGraph
    peaks: SignalPeaks
    job: Job

    @cached_property
    def _found(self) -> tuple[float, tuple[str, ...]]:
        return region(Variables(self.graph), self.job, self.peaks, NOTHING_FIXED).room()

    @property
    def room(self) -> float:
        """As `Region.room`: negative where no scaling fits."""
        return self._found[0]

    def further(self) -> Iterator[_Trial]:
        """The graphs with one stage more that can have more room."""
        named = set(self._found[1])
        hit: dict[str, list[str]] = {}
        for block in self.graph.blocks:
            for term in block.terms:
                if f"{block.name} {term.source}" in named:
                    hit.setdefault(term.source, []).append(block.name)
        for source, readers in hit.items():
            for reader in readers:
                yield self._with_stage(source, (reader,))
            if len(readers) > 1:
                yield self._with_stage(source, tuple(readers))

    def _with_stage(self, source: str, readers: tuple[str, ...]) -> _Trial:
        taken = self.graph.by_name
        name = next(n for k in range(1, len(taken) + 2) if (n := f"g{k}") not in taken)
        # What the stage carries is what it reads; the input has a peak of 1 by definition.
        fastest = 2 * math.pi * self.job.signal.band_hz[1]
        peaks = replace(
            self.peaks,
            peak={**self.peaks.peak, name: self.peaks.peak.get(source, 1.0)},
            rate={**self.peaks.rate, name: self.peaks.rate.get(source, fastest)},
        )
        return _Trial(through_stage(self.graph, source, readers, name), peaks, self.job)
