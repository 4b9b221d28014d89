"""Signs: which blocks carry their signal negated, so that the fewest inverters are needed.

Every cell inverts.  With sigma_b = +1 or -1 the output of block b carries sigma_b times its
signal, and a term of weight w from source j into block i can be wired directly exactly when
sigma_i * sign(w) * sigma_j = -1.  Otherwise the block reads an inverted copy of j, which one
inverter provides to all who need it.  The count of sources that need an inverter is
minimised exactly: all sign choices are enumerated, one block at a time, keeping for every
state of the blocks that still have open connections only the cheapest choice so far
(dynamic programming; an inverter-free choice exists only for a balanced signed graph,
Harary 1953, from memory).

An adder with `both_signs` reads every source directly: a term that an inverting cell could not
take goes to the other input of its op-amp.  Among the choices with the fewest inverters, one
with the fewest such terms is taken.
"""

from __future__ import annotations

from dataclasses import dataclass

from synth.graph import INPUT, BlockGraph

__all__ = ["Polarity", "choose_polarity", "inverter_count"]


@dataclass(frozen=True)
class Polarity:
    """The signs of a block graph.

    Parameters
    ----------
    signs
        +1 or -1 for each block; the input is +1.
    inverters
        The sources (blocks or ``"in"``) that need an inverted copy, in the graph's order.
    output_inverted
        Whether the board's output carries -H(s).
    output_from_inverter
        Whether the board's output is the inverted copy of the output block.
    both_signs
        The blocks whose cells take terms of either sign.
    """

    signs: dict[str, int]
    inverters: tuple[str, ...]
    output_inverted: bool
    output_from_inverter: bool
    both_signs: frozenset[str] = frozenset()

    def of(self, source: str) -> int:
        """Sign at the direct output of a source, +1 for the input."""
        return self.signs.get(source, 1)

    def direct(self, block: str, source: str, weight: float) -> bool:
        """Whether a term of that weight is wired to the direct output of its source."""
        return block in self.both_signs or _direct(self.of(block), weight, self.of(source))

    def at_plus(self, block: str, source: str, weight: float) -> bool:
        """Whether a term of that weight goes to the non-inverting input of its cell."""
        return block in self.both_signs and not _direct(self.of(block), weight, self.of(source))


def inverter_count(graph: BlockGraph, signs: dict[str, int], inverted: str) -> int:
    """Inverters needed with given signs; `inverted` as in `choose_polarity`."""
    return len(_needed(graph, signs, inverted))


def choose_polarity(graph: BlockGraph, *, inverted: str = "no") -> Polarity:
    """The signs with the fewest inverters.

    Parameters
    ----------
    inverted
        ``"no"``: the output carries H(s); ``"yes"``: -H(s); ``"either"``: as is cheaper,
        H(s) when both cost the same.
    """
    if inverted == "either":
        upright = choose_polarity(graph, inverted="no")
        turned = choose_polarity(graph, inverted="yes")
        return turned if len(turned.inverters) < len(upright.inverters) else upright
    signs = _best_signs(graph, inverted)
    needed = _needed(graph, signs, inverted)
    wanted = -1 if inverted == "yes" else 1
    return Polarity(
        signs=signs,
        inverters=tuple(s for s in (INPUT, *(b.name for b in graph.blocks)) if s in needed),
        output_inverted=inverted == "yes",
        output_from_inverter=signs[graph.output] != wanted,
        both_signs=frozenset(b.name for b in graph.blocks if b.both_signs),
    )


def _direct(block_sign: int, weight: float, source_sign: int) -> bool:
    return block_sign * source_sign * (1 if weight > 0 else -1) < 0


def _needed(graph: BlockGraph, signs: dict[str, int], inverted: str) -> set[str]:
    """Sources that need an inverted copy."""
    needed = {
        t.source
        for b in graph.blocks
        for t in b.terms
        if not b.both_signs and not _direct(signs[b.name], float(t.weight), signs.get(t.source, 1))
    }
    if signs[graph.output] != (-1 if inverted == "yes" else 1):
        needed.add(graph.output)
    return needed


@dataclass(frozen=True)
class _Edge:
    source: str
    reader: str
    positive: bool
    both_signs: bool = False

    def conflicts(self, signs: dict[str, int]) -> bool:
        return not _direct(signs[self.reader], 1.0 if self.positive else -1.0, signs[self.source])


def _best_signs(graph: BlockGraph, inverted: str) -> dict[str, int]:
    """Dynamic programming over the blocks, exact."""
    edges = [
        _Edge(t.source, b.name, t.weight > 0, b.both_signs) for b in graph.blocks for t in b.terms
    ]
    # The world outside reads the output with a sign of its own: an edge to a fixed reader.
    edges.append(_Edge(graph.output, _WORLD, inverted != "yes"))
    touching: dict[str, list[_Edge]] = {}
    for edge in edges:
        touching.setdefault(edge.source, []).append(edge)
        if edge.reader != edge.source:
            touching.setdefault(edge.reader, []).append(edge)
    # A state is the signs of the assigned names that still have open edges, and which of them
    # already need an inverter; its value is the cost and the signs that led there.
    start: dict[str, int] = {INPUT: 1, _WORLD: -1}
    states: dict[tuple[object, ...], _State] = {(): ((0, 0), start, frozenset())}
    done: set[str] = set(start)
    for name in _order(graph, touching):
        done.add(name)
        closing = [e for e in touching[name] if e.source in done and e.reader in done]
        open_names = sorted(
            n for n in done if any(not {e.source, e.reader} <= done for e in touching.get(n, ()))
        )
        following: dict[tuple[object, ...], _State] = {}
        for (inverters, at_plus), signs, flagged in states.values():
            for sign in (1, -1):
                trial = {**signs, name: sign}
                against = [e for e in closing if e.conflicts(trial)]
                hit = {e.source for e in against if not e.both_signs} - flagged
                more = sum(e.both_signs for e in against)
                flags = flagged | hit
                key = tuple((trial[n], n in flags) for n in open_names)
                value = ((inverters + len(hit), at_plus + more), trial, flags)
                if key not in following or value[0] < following[key][0]:
                    following[key] = value
        states = following
    _, signs, _ = min(states.values(), key=lambda v: v[0])
    return {b.name: signs[b.name] for b in graph.blocks}


_WORLD = "*"

# (inverters, terms at a non-inverting input), signs, sources that need an inverter.
_State = tuple[tuple[int, int], dict[str, int], frozenset[str]]


def _order(graph: BlockGraph, touching: dict[str, list[_Edge]]) -> list[str]:
    """An order of the blocks that keeps few of them open at a time (greedy)."""
    waiting = [b.name for b in graph.blocks]
    done = {INPUT, _WORLD}
    order: list[str] = []

    def still_open(extra: str) -> int:
        have = done | {extra}
        return sum(any(not {e.source, e.reader} <= have for e in touching.get(n, ())) for n in have)

    while waiting:
        best = min(waiting, key=lambda n: (still_open(n), waiting.index(n)))
        waiting.remove(best)
        done.add(best)
        order.append(best)
    return order
