"""Which block stands where along the signal path, and where the path may be cut into rows.

Blocks that feed each other in a loop stay together (strongly connected components); the
components follow each other as the signal does.  Inside a loop the order is the one that
needs the fewest and shortest connections beside the straight line, found by a search that
moves one block or turns a run of blocks around while that helps.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import TypeAlias

from netlist.blocks.buses import Link, buses
from synth.graph import INPUT, BlockGraph

__all__ = ["carried", "ordered", "sections"]

# Lines beside the path, connections on them, sum of their lengths.
Cost: TypeAlias = tuple[int, int, int]


def ordered(graph: BlockGraph) -> tuple[str, ...]:
    """Block names from left to right."""
    reads = {b.name: {t.source for t in b.terms} - {INPUT} for b in graph.blocks}
    waiting = _components(reads)
    placed: list[str] = []
    while waiting:
        ready = [c for c in waiting if all(reads[n] <= {*placed, *c} for n in c)]
        last = placed[-1] if placed else INPUT
        follow = [c for c in ready if any(last in reads[n] for n in c)]
        chosen = (follow or ready)[0]
        waiting.remove(chosen)
        placed += _arranged(graph, chosen, placed)
    return tuple(placed)


def sections(graph: BlockGraph, order: Sequence[str]) -> list[tuple[str, ...]]:
    """`order` cut wherever one signal alone, going forward, crosses the cut.

    `carried` names that signal.
    """
    out: list[tuple[str, ...]] = []
    start = 0
    for k in range(1, len(order)):
        if len(_crossing(graph, order, k)) == 1:
            out.append(tuple(order[start:k]))
            start = k
    out.append(tuple(order[start:]))
    return out


def carried(graph: BlockGraph, order: Sequence[str], cut: int) -> str:
    """The one signal that crosses the cut before position `cut`; the output at the end."""
    if cut == len(order):
        return graph.output
    (signal,) = _crossing(graph, order, cut)
    return signal


def _crossing(graph: BlockGraph, order: Sequence[str], cut: int) -> set[str]:
    """Signals read across a cut; a signal going backwards counts as two."""
    left = {INPUT, *order[:cut]}
    out: set[str] = set()
    for block in graph.blocks:
        for term in block.terms:
            if term.source in left and block.name not in left:
                out.add(term.source)
            elif term.source not in left and block.name in left:
                out |= {term.source, f"{term.source} backwards"}
    if graph.output in left and cut < len(order):
        out.add(graph.output)
    return out


def _components(reads: Mapping[str, set[str]]) -> list[list[str]]:
    """Strongly connected components, each and all in the order of the mapping."""
    reach: dict[str, set[str]] = {}
    for name in reads:
        seen: set[str] = set()
        stack = [name]
        while stack:
            for source in reads[stack.pop()] - seen:
                seen.add(source)
                stack.append(source)
        reach[name] = seen
    out: list[list[str]] = []
    done: set[str] = set()
    for name in reads:
        if name not in done:
            loop = [n for n in reads if n == name or (n in reach[name] and name in reach[n])]
            done |= set(loop)
            out.append(loop)
    return out


def _arranged(graph: BlockGraph, names: list[str], before: list[str]) -> list[str]:
    """The blocks of one loop in the best order found."""
    if len(names) == 1:
        return names
    inside = set(names)
    links = [(t.source, b.name) for b in graph.blocks for t in b.terms]
    links = [(s, d) for s, d in links if s in inside or d in inside]
    if graph.output in inside:
        links.append((graph.output, "the exit"))
    feeding = before[-1] if before else INPUT

    def cost(order: Sequence[str]) -> Cost:
        place = {name: k for k, name in enumerate(order)}
        end = len(order)
        # What stands before counts as just left of the loop, or further left.
        pairs = {(place.get(s, -1 if s == feeding else -2), place.get(d, end)) for s, d in links}
        beside = [k for k in (Link(s, d, 1.0) for s, d in sorted(pairs)) if not k.straight]
        lines = [
            bus
            for above in (True, False)
            for bus in buses([k for k in beside if k.above == above], above=above)
        ]
        return len(lines), len(beside), sum(bus.reach for bus in lines)

    return min((_improved(start, cost) for start in (names, names[::-1])), key=cost)


def _improved(order: list[str], cost: Callable[[Sequence[str]], Cost]) -> list[str]:
    """`order` after every move that lowers the cost."""
    best = cost(order)
    improving = True
    while improving:
        improving = False
        for candidate in _moves(order):
            value = cost(candidate)
            if value < best:
                order, best, improving = candidate, value, True
                break
    return order


def _moves(order: list[str]) -> Iterator[list[str]]:
    """Every order with one block moved or one run of blocks turned around."""
    n = len(order)
    for i in range(n):
        rest = order[:i] + order[i + 1 :]
        for j in range(n):
            if j != i:
                yield [*rest[:j], order[i], *rest[j:]]
    for i in range(n):
        for j in range(i + 3, n + 1):
            yield order[:i] + order[i:j][::-1] + order[j:]
