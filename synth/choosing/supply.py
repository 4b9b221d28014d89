"""How many parts of every value there are, and choices that stay within it.

A slot is one value of one kind of part; a choice of values uses one part of a slot for every
part with that value.  Steps along the list of values are allowed as far as every slot is left
with no fewer than none; a choice beyond that is repaired, one part at a time, by the move that
costs least.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.grid import ValueGrid
from synth.choosing.model import LinearModel
from synth.circuit import Circuit, Passive
from synth.errors import RealizationError
from synth.parts import PartRule
from synth.quantities import show

__all__ = ["Supply", "allotted", "check_supply"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]
Mask = NDArray[np.bool_]

# Stands for "enough": more than any circuit has parts.
ENOUGH = 1 << 30


@dataclass(frozen=True, eq=False)
class Supply:
    """The counts behind a `ValueGrid`.

    Attributes
    ----------
    slots
        Slot of each value of each part, shape (P, longest list), -1 where there is none.
    counts
        How many parts each slot has, shape (S,).
    """

    grid: ValueGrid
    slots: Index
    counts: Index

    @classmethod
    def of(cls, grid: ValueGrid) -> Supply | None:
        """The counts of a grid; None where there is enough of everything."""
        known: dict[tuple[str, float], int] = {}
        counts: list[int] = []
        slots = np.full(grid.logs.shape, -1, dtype=np.intp)
        for k, (part, values) in enumerate(zip(grid.parts, grid.values, strict=True)):
            for column, value in enumerate(values):
                count = None if part.rule is None else part.rule.count_of(float(value))
                key = (part.kind if part.rule else part.ref, float(value))
                if key not in known:
                    known[key] = len(counts)
                    counts.append(ENOUGH if count is None else count)
                slots[k, column] = known[key]
        if min(counts) == ENOUGH:
            return None
        return cls(grid, slots, np.array(counts))

    def at(self, index: Index) -> Index:
        """Slot of each part's value, shape (P,)."""
        return np.asarray(self.slots[np.arange(index.size), index], dtype=np.intp)

    def spare(self, index: Index) -> Index:
        """Parts left in each slot, negative where there are too few, shape (S,)."""
        used = np.bincount(self.at(index), minlength=self.counts.size)
        return np.asarray(self.counts - used, dtype=np.intp)

    def suffices(self, index: Index) -> bool:
        """Whether there are parts enough for a choice."""
        return bool(np.all(self.spare(index) >= 0))

    def steps(self, index: Index, part: Index, target: Index) -> tuple[Mask, Mask]:
        """Which steps, of `part` (n,) to the value `target` (n,), leave enough of everything:
        alone, shape (n,), and two together, shape (n, n).  `index` itself must suffice."""
        spare = self.spare(index)
        source, slot = self.at(index)[part], self.slots[part, target]
        room = spare[slot]
        freed = np.equal.outer(slot, source).astype(np.intp)  # what j leaves where i goes
        shared = np.equal.outer(slot, slot).astype(np.intp)
        fits = room[:, None] + freed - shared >= 1
        return room >= 1, fits & fits.T

    def _short(self, index: Index) -> str:
        """What a choice with too few parts lacks."""
        slots = self.at(index)
        first = int(np.flatnonzero(self.spare(index)[slots] < 0)[0])
        refs = ", ".join(
            p.ref for p, s in zip(self.grid.parts, slots, strict=True) if s == slots[first]
        )
        part = self.grid.parts[first]
        value = float(self.grid.values[first][index[first]])
        unit = "ohm" if part.kind == "resistor" else "F"
        return (
            f"board.stock: got {refs} of {show(value, unit)}, expected at most the "
            f"{self.counts[slots[first]]} in the stock, and what all others leave of it is "
            "nothing for them"
        )

    def repaired(self, index: Index, model: LinearModel) -> Index:
        """The choice with parts moved from slots that have too few to slots with some left, each
        by the move that costs least.

        Raises
        ------
        RealizationError
            No part that is short can move: what all others leave is too little.
        """
        index = index.copy()
        movable = self.grid.counts > 1
        while np.any((spare := self.spare(index)) < 0):
            short = movable & (spare[self.at(index)] < 0)
            parts, targets = np.nonzero(short[:, None] & (self.slots >= 0))
            free = spare[self.slots[parts, targets]] > 0
            if not np.any(free):
                raise RealizationError(self._short(index))
            parts, targets = parts[free], targets[free]
            logs = self.grid.logs_at(index)
            change = self.grid.logs[parts, targets] - logs[parts]
            moved = model.residual(logs)[:, None] + model.matrix[:, parts] * change
            best = int(np.argmin(np.sum(moved**2, axis=0) * (1 + 0.1 * np.abs(change))))
            index[parts[best]] = targets[best]
        return index


def check_supply(parts: Sequence[Passive]) -> None:
    """Refuse a circuit that needs more parts than there are, of all the values any may have.

    Raises
    ------
    RealizationError
        With both numbers.
    """
    for kind in ("resistor", "capacitor"):
        rules = [p.rule for p in parts if p.kind == kind and p.rule is not None]
        if not rules or not rules[0].stock:
            continue
        counts = {value: rule.count_of(value) for rule in rules for value in rule.values.tolist()}
        there = sum(ENOUGH if c is None else c for c in counts.values())
        if there < len(rules):
            raise RealizationError(
                f"board.stock: the circuit needs {len(rules)} {kind}s, the stock has {there} "
                f"{_between(rules[0])}; expected more of them, or another form"
            )


def _between(rule: PartRule) -> str:
    unit = "ohm" if rule.kind == "resistor" else "F"
    return f"from {show(rule.smallest, unit)} to {show(rule.largest, unit)}"


def allotted(circuit: Circuit) -> Circuit:
    """The circuit with a line of the stock for every part whose value has several: the tightest
    line first, parts in their order, as far as its count goes."""
    used: dict[tuple[str, float], int] = {}
    parts: list[Passive] = []
    for part in circuit.passives:
        lines = part.rule.lines_of(part.value) if part.rule else ()
        if len(lines) > 1:
            key = (part.kind, part.value)
            place = used[key] = used.get(key, 0) + 1
            parts.append(replace(part, grade=_grade(part, place)))
        else:
            parts.append(part)
    return replace(circuit, passives=tuple(parts))


def _grade(part: Passive, place: int) -> float:
    """Tolerance of the `place`-th part of its value, counted from 1."""
    assert part.rule is not None
    lines = part.rule.lines_of(part.value)
    for line in lines:
        if line.count is None or place <= line.count:
            return line.tolerance
        place -= line.count
    return lines[-1].tolerance
