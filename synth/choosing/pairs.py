"""Two resistors in the place of one, where one cannot reach the limit.

Where the response misses a limit, or the parts that bind keep it far from the target, an input
resistor becomes two: in parallel, or in series above half of the largest value.  Which ones
follows from what their continuous value would gain; as few as are needed.  In the search a
pair is one part whose drawer holds every value two can make, so it is chosen jointly with all
others; afterwards it becomes two parts.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.choose import Choice, with_ideal_op_amps
from synth.choosing.descent import Neighbourhood
from synth.choosing.model import LinearModel
from synth.choosing.task import Task
from synth.circuit import Cell, Circuit, Passive
from synth.nodal import compile_circuit
from synth.parts import PartRule, StockItem

__all__ = [
    "BINDING_SHARE",
    "WORTHWHILE",
    "Pair",
    "Pairing",
    "as_one",
    "choose_with_pairs",
    "pair_values",
    "with_pairs",
]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# Pairs are looked for where the error takes up more than the whole of a limit, or the bound of
# what single parts can do more than this share of the limits.
BINDING_SHARE = 0.5

# Most pairs on a board, and what the error must come down to for them, a ratio.
MOST_PAIRS = 3
WORTHWHILE = 0.8

# Values two resistors can make: within this ratio of the value of one, no closer than this.
WIDEST = 10.0
CLOSEST = 2e-4

# Sets of resistors of one size from which larger ones are made.
BEAM = 8


@dataclass(frozen=True, kw_only=True)
class Pair:
    """Two resistors that stand for the resistor `ref`; `values` [ohm], `how` ``"parallel"`` or
    ``"series"``."""

    ref: str
    values: tuple[float, float]
    how: str

    @property
    def refs(self) -> tuple[str, str]:
        """References of the two."""
        return f"{self.ref}A", f"{self.ref}B"

    @property
    def value(self) -> float:
        """Resistance of both together [ohm]."""
        return _together(*self.values, self.how)


@dataclass(frozen=True, kw_only=True)
class Pairing:
    """What came of pairs.

    Parameters
    ----------
    task
        The task with the circuit that has the pairs, its values ideal.
    choice
        The chosen values, of the circuit with the pairs.
    pairs
        Empty where none is needed or none helps.
    needed
        Whether single parts leave something to be desired.
    share_before, share_after
        Largest error as a share of its limit with single parts, and with the pairs.
    """

    task: Task
    choice: Choice
    pairs: tuple[Pair, ...]
    needed: bool
    share_before: float
    share_after: float


def choose_with_pairs(task: Task, plain: Choice) -> Pairing:
    """The choice of values, with pairs of resistors where single ones do not suffice.

    `plain` is what came of `task` with single parts.
    """
    share = _share(task, plain)
    found = Pairing(
        task=task,
        choice=plain,
        pairs=(),
        needed=not _satisfied(task, plain, share),
        share_before=share,
        share_after=share,
    )
    if not found.needed:
        return found
    for refs in _promising(task, plain):
        trial = _tried(task, plain, refs)
        values = np.array([p.value for p in trial.choice.circuit.passives])
        if not trial.task.stock_holds(values):
            continue
        if trial.share_after < WORTHWHILE * found.share_after:
            found = replace(trial, share_before=share)
        if found.pairs and _satisfied(found.task, found.choice, found.share_after):
            break
    return found


def as_one(
    part: Passive, rule: PartRule, *, about: float, how: str = ""
) -> tuple[Passive, dict[float, Pair | None]]:
    """`part` with a drawer that holds every value two resistors of `rule` can make within
    `WIDEST` of `about` [ohm], and how each is made; `how` as of `pair_values`."""
    drawer = pair_values(rule, smallest=about / WIDEST, largest=about * WIDEST, how=how)
    stock = tuple(StockItem(value=v, tolerance=rule.tolerance) for v in drawer)
    wide = replace(rule, stock=stock, smallest=stock[0].value / 2, largest=2 * about * WIDEST)
    return replace(part, rule=wide), drawer


def pair_values(
    rule: PartRule, *, smallest: float, largest: float, how: str = ""
) -> dict[float, Pair | None]:
    """What one part of `rule` (None) or two can make within a range, by value, ascending.

    In parallel up to half of the rule's largest value, in series above.  Of values closer
    than `CLOSEST` one is kept: a single part rather than two, two alike rather than unlike.
    `how` is ``"parallel"`` or ``"series"`` where only such pairs are wanted, and no single part.
    """
    v = rule.values
    low, high = np.triu_indices(v.size)
    if rule.stock:
        alone = np.array([rule.count_of(each) == 1 for each in v.tolist()])
        allowed = (low != high) | ~alone[low]
        low, high = low[allowed], high[allowed]
    a, b = v[high], v[low]
    unlike = 1 + np.log(a / b)
    in_series = np.full(a.size, True) if how == "series" else a + b > v[-1] / 2
    value = np.concatenate([v, a * b / (a + b), (a + b)[in_series]])
    cost = np.concatenate([np.zeros(v.size), unlike, unlike[in_series]])
    # The cheapest of each bin of ln, ascending.
    kind = np.repeat(["", "parallel", "series"], [v.size, a.size, int(np.sum(in_series))])
    inside = np.flatnonzero(
        (value >= smallest) & (value <= largest) & ((kind == how) | np.array(not how))
    )
    order = inside[np.lexsort((value[inside], cost[inside]))]
    bins = np.floor(np.log(value[order]) / CLOSEST).astype(np.int64)
    order = order[np.unique(bins, return_index=True)[1]]
    first = np.concatenate([v, a, a[in_series]])
    second = np.concatenate([v, b, b[in_series]])
    made: dict[float, Pair | None] = {}
    for k in order.tolist():
        both = (float(first[k]), float(second[k]))
        pair = Pair(ref="R", values=both, how=str(kind[k]))
        made[float(value[k]) if k < v.size else pair.value] = None if k < v.size else pair
    return made


def with_pairs(circuit: Circuit, pairs: tuple[Pair, ...]) -> Circuit:
    """The circuit with two resistors in the place of each one that `pairs` names.

    Both keep the ratio of value to ideal value that the one had.
    """
    for pair in pairs:
        circuit = _with_pair(circuit, pair)
    return circuit


def _with_pair(circuit: Circuit, pair: Pair) -> Circuit:
    one, cell = circuit.by_ref[pair.ref], circuit.cell_of(pair.ref)
    assert cell is not None
    source = circuit.branch(cell, pair.ref).net
    node, middle = cell.node_of(one), f"{pair.ref.lower()}_m"
    if pair.how == "parallel":
        nets = [(source, node), (source, node)]
    else:
        nets = [(source, middle), (middle, node)]
    two = tuple(
        replace(
            one,
            ref=ref,
            nets=net,
            value=value * (one.value / pair.value),
            ideal=value * (one.ideal / pair.value),
            sets=f"{one.sets} ({place} of two in {pair.how})",
        )
        for ref, net, value, place in zip(
            pair.refs, nets, pair.values, ("first", "second"), strict=True
        )
    )
    passives: list[Passive] = []
    for part in circuit.passives:
        passives += two if part.ref == pair.ref else (part,)
    cells = tuple(_paired_cell(c, pair) if c == cell else c for c in circuit.cells)
    return replace(circuit, passives=tuple(passives), cells=cells)


def _paired_cell(cell: Cell, pair: Pair) -> Cell:
    first, second = pair.refs
    inside = (first, second) if pair.how == "parallel" else (second,)
    inputs: list[str] = []
    for ref in cell.inputs:
        inputs += inside if ref == pair.ref else (ref,)
    series = cell.series if pair.how == "parallel" else (*cell.series, (second, first))
    return replace(cell, inputs=tuple(inputs), series=series)


def _share(task: Task, choice: Choice) -> float:
    return float(task.shares(np.array([p.value for p in choice.circuit.passives]))[0])


def _satisfied(task: Task, choice: Choice, share: float) -> bool:
    """Whether the limits hold, and no part that binds takes up too much of them."""
    bound = choice.certificate.lower_bound / task.limit_rms
    return share <= 1 and bound <= BINDING_SHARE


def _promising(task: Task, plain: Choice) -> Iterator[tuple[str, ...]]:
    """For one, two, ... pairs the resistors whose continuous values would gain most, where
    that is worth while; larger sets grow from the `BEAM` best smaller ones."""
    grid, goal = task.grid, task.goal
    values = np.array([p.value for p in plain.circuit.passives])
    ideal = compile_circuit(with_ideal_op_amps(task.circuit))
    model = LinearModel.about(task.program, values, goal, jacobian=ideal)
    start = grid.nearest(np.log(values))
    inputs = {ref for cell in task.circuit.cells for ref in cell.inputs}
    free = [int(k) for k in np.flatnonzero(grid.resistors) if grid.parts[k].ref in inputs]
    best: list[tuple[int, ...]] = [()]
    for _ in range(min(MOST_PAIRS, len(free))):
        groups = sorted({tuple(sorted({*g, k})) for g in best for k in free if k not in g})
        costs = [_continuous(task, model, start, np.array(group)) for group in groups]
        order = np.argsort(costs, kind="stable")
        best = [groups[k] for k in order[:BEAM]]
        if costs[order[0]] < WORTHWHILE**2 * model.mean_square(np.log(values)):
            yield tuple(grid.parts[k].ref for k in best[0])


def _continuous(task: Task, model: LinearModel, start: Index, parts: Index) -> float:
    """Mean square error with some parts continuous and the others near `start`."""
    others = model.without(parts)
    _, cost, _ = Neighbourhood(task.grid, others).descend(start)
    return cost + model.floor


def _tried(task: Task, plain: Choice, refs: tuple[str, ...]) -> Pairing:
    """The choice of values with pairs for the resistors `refs`."""
    drawers: dict[str, dict[float, Pair | None]] = {}
    parts: list[Passive] = []
    for part in task.circuit.passives:
        if part.ref in refs and part.rule is not None:
            about = plain.circuit.by_ref[part.ref].value
            one, drawers[part.ref] = as_one(part, part.rule, about=about)
            parts.append(one)
        else:
            parts.append(part)
    choice = task.with_circuit(replace(task.circuit, passives=tuple(parts))).choose()
    pairs: list[Pair] = []
    for ref, drawer in drawers.items():
        pair = drawer[choice.circuit.by_ref[ref].value]
        if pair is not None:
            pairs.append(replace(pair, ref=ref))
    rules = {p.ref: p.rule for p in task.circuit.passives}
    single = tuple(replace(p, rule=rules[p.ref]) for p in choice.circuit.passives)
    chosen = with_pairs(replace(choice.circuit, passives=single), tuple(pairs))
    task = task.with_circuit(with_pairs(task.circuit, tuple(pairs)))
    choice = replace(choice, circuit=chosen, nearest=plain.nearest)
    share = _share(task, choice)
    return Pairing(
        task=task,
        choice=choice,
        pairs=tuple(pairs),
        needed=True,
        share_before=share,
        share_after=share,
    )


def _together(a: float, b: float, how: str) -> float:
    return a + b if how == "series" else a * b / (a + b)
