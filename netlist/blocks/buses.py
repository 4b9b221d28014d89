"""Lines beside the straight path: which connections share one.

A connection that is not from a block to its right-hand neighbour runs on a line above the
path when it goes forward, below it when it goes back.  A line either spreads one signal to
several readers or gathers several sources for one reader.  The fewest lines that carry all
connections are a smallest vertex cover of the bipartite graph of sources and readers, which
follows from a largest matching (König 1931, theorem and construction from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

__all__ = ["Bus", "Link", "buses"]


@dataclass(frozen=True)
class Link:
    """One weighted connection between places in a row.

    `source` and `target` are places, -1 the input of the row and the number of blocks its exit.
    `alone` says that the target reads nothing else.
    """

    source: int
    target: int
    weight: float
    alone: bool = False

    @property
    def straight(self) -> bool:
        """Whether the target is the right-hand neighbour of the source."""
        return self.target == self.source + 1

    @property
    def above(self) -> bool:
        """Whether it goes forward past other blocks."""
        return self.target > self.source + 1


@dataclass(frozen=True)
class Bus:
    """A line: from place `hub` to several when `spreads`, else from several to `hub`."""

    above: bool
    spreads: bool
    hub: int
    links: tuple[Link, ...]

    @property
    def reach(self) -> int:
        """Number of places between its ends."""
        places = [p for link in self.links for p in (link.source, link.target)]
        return max(places) - min(places)


def buses(links: Sequence[Link], *, above: bool) -> list[Bus]:
    """The fewest lines that carry `links`, all on one side."""
    sources = _cover(links)
    taken: dict[tuple[bool, int], list[Link]] = {}
    for link in links:
        spread, gather = (True, link.source), (False, link.target)
        choices = [key for key in (spread, gather) if key in sources]
        key = max(choices, key=lambda key: _weight(links, key))
        taken.setdefault(key, []).append(link)
    return [
        Bus(above, spreads, hub, tuple(sorted(found, key=lambda k: (k.source, k.target))))
        for (spreads, hub), found in sorted(taken.items(), key=lambda item: item[0])
    ]


def _weight(links: Sequence[Link], key: tuple[bool, int]) -> int:
    """How many links a hub could carry."""
    spreads, hub = key
    return sum((link.source if spreads else link.target) == hub for link in links)


def _cover(links: Sequence[Link]) -> set[tuple[bool, int]]:
    """A smallest set of (spreads, place) that touches every link."""
    targets: dict[int, list[int]] = {}
    for link in links:
        targets.setdefault(link.source, []).append(link.target)
    partner: dict[int, int] = {}  # of a target

    def augment(source: int, seen: set[int]) -> bool:
        for target in targets[source]:
            if target not in seen:
                seen.add(target)
                if target not in partner or augment(partner[target], seen):
                    partner[target] = source
                    return True
        return False

    for source in sorted(targets):
        augment(source, set())
    # Alternating paths from the unmatched sources.
    reached = set(targets) - set(partner.values())
    hit: set[int] = set()
    stack = sorted(reached)
    while stack:
        for target in targets[stack.pop()]:
            if target not in hit:
                hit.add(target)
                if partner[target] not in reached:
                    reached.add(partner[target])
                    stack.append(partner[target])
    spreads = {(True, source) for source in targets if source not in reached}
    return spreads | {(False, target) for target in hit}
