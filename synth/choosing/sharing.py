"""Fewer distinct values where the error hardly changes.

Each step takes away one value in use, or puts one value in the place of two neighbours, and
searches the values that are left, as if they were all a drawer held.  The step that costs
least is taken, as long as the whole circuit, op-amps included, stays within the allowance.
Deterministic, and bounded: no step looks at more than `LARGEST_OPTIONS` sets of values.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from synth.choosing.choose import Choice, with_ideals
from synth.choosing.descent import Neighbourhood
from synth.choosing.grid import ValueGrid
from synth.choosing.model import LinearModel, compensation
from synth.choosing.task import Task
from synth.circuit import Circuit, Passive
from synth.parts import StockItem

__all__ = ["ALLOWED_RATIO", "ALLOWED_SHARE", "Sharing", "distinct_values", "share_values"]

Real = NDArray[np.float64]
ValueSet = frozenset[tuple[str, float]]

# The allowance: the largest error, of magnitude or phase as a share of its limit, whichever is
# more, may grow to the larger of this ratio of what it was and this share.  No limit that held may
# be missed for it.
ALLOWED_RATIO = 1.25
ALLOWED_SHARE = 0.1

# Sets of values looked at in one step, and how many results of them the nodal engine judges.
LARGEST_OPTIONS = 400
JUDGED = 32

# Steps along the values in use that the search tries, and pairs of steps tried two at a time.
REACH = (1, 2, 3, 4)
QUADS = 60


@dataclass(frozen=True, kw_only=True)
class Sharing:
    """What sharing did: distinct values, and the largest error as a share of its limit, before and
    after."""

    choice: Choice
    before: int
    after: int
    share_before: float
    share_after: float


def distinct_values(circuit: Circuit) -> ValueSet:
    """The kinds and values on the board."""
    return frozenset((p.kind, p.value) for p in circuit.bought)


def share_values(task: Task, choice: Choice) -> Sharing:
    """The choice with as few distinct values as the allowance and the ceilings let it have.

    `choice` is what came of `task`.  The certificate's bound is kept, since it holds for every
    choice of values.
    """
    values = np.array([p.value for p in choice.circuit.passives])
    share_before = float(task.shares(values)[0])
    most = min(max(ALLOWED_RATIO * share_before, ALLOWED_SHARE), max(1.0, share_before))
    shared, share_after = values, share_before
    while (found := _step(task, shared, most)) is not None:
        shared, share_after = found
    before, after = _in_use(task, values), _in_use(task, shared)
    if len(after) < len(before):
        rms_after = float(np.sqrt(task.mean_squares(shared)[0]))
        refs = (p.ref for p in choice.circuit.passives)
        circuit = choice.circuit.with_values(dict(zip(refs, shared.tolist(), strict=True)))
        certificate = replace(
            choice.certificate,
            rms=rms_after,
            proven=False,
            better=None,
            unshared=choice.certificate,
        )
        circuit = with_ideals(circuit, task.goal)
        choice = replace(choice, circuit=circuit, certificate=certificate)
    return Sharing(
        choice=choice,
        before=len(before),
        after=len(after),
        share_before=share_before,
        share_after=share_after,
    )


def _in_use(task: Task, values: Real) -> ValueSet:
    parts = zip(task.circuit.passives, values.tolist(), strict=True)
    return frozenset((part.kind, value) for part, value in parts if part.on_board)


def _step(task: Task, values: Real, most: float) -> tuple[Real, float] | None:
    """The choice with one distinct value less whose largest error is the smallest share of its
    limit, and that share; None where every such share is above `most`.
    """
    model = LinearModel.about(task.program, values, task.goal)
    limits = None if task.ceilings is None else task.ceilings.about(task.program, values)
    used = _in_use(task, values)
    found: dict[tuple[float, ...], tuple[bool, float]] = {}
    for option in _options(task, used):
        trial = _searched(task, model, values, option)
        if trial is None or len(_in_use(task, trial)) >= len(used):
            continue
        if task.stock_holds(trial):
            logs = np.log(trial)
            above = limits is not None and not limits.hold(logs)
            found[tuple(trial.tolist())] = above, model.mean_square(logs)
    # The linear models rank, the engine decides.
    boards = np.array(sorted(found, key=lambda key: (found[key], key))[:JUDGED])
    if not boards.size:
        return None
    shares = np.where(task.levels_hold(boards), task.shares(boards), np.inf)
    k = int(np.argmin(shares))
    return (boards[k], float(shares[k])) if shares[k] <= most else None


def _options(task: Task, used: ValueSet) -> list[ValueSet]:
    """The sets of values with one less: each value dropped, or two neighbours replaced by one
    between them or next to them."""
    needed = {(p.kind, p.value) for p in task.circuit.bought if p.fixed}
    options = [used - {each} for each in sorted(used - needed)]
    for kind in ("resistor", "capacitor"):
        offered = np.unique(
            np.concatenate(
                [
                    task.grid.values[k]
                    for k, p in enumerate(task.circuit.passives)
                    if p.on_board and p.kind == kind and not p.fixed
                ]
                or [np.empty(0)]
            )
        )
        free = sorted(value for k, value in used - needed if k == kind)
        for low, high in pairwise(free):
            first = max(int(np.searchsorted(offered, low)) - 1, 0)
            last = int(np.searchsorted(offered, high)) + 2
            between = offered[first:last]
            stride = max(1, between.size // 8)
            rest = used - {(kind, low), (kind, high)}
            options += [rest | {(kind, float(v))} for v in between[::stride]]
    return options[:LARGEST_OPTIONS]


def _searched(task: Task, model: LinearModel, values: Real, option: ValueSet) -> Real | None:
    """The best choice from a set of values near `values`; None where some part has none."""
    parts = [_limited(p, option) for p in task.circuit.passives]
    if any(part is None for part in parts):
        return None
    grid = ValueGrid(tuple(p for p in parts if p is not None))
    around = Neighbourhood(grid, model, reach=REACH, quads=QUADS)
    logs = np.log(values)
    nearest = grid.nearest(logs)
    rounded = grid.logs_at(nearest)
    free = grid.resistors
    moved = rounded.copy()
    moved[free] -= compensation(model.matrix[:, free]) @ model.residual(rounded)
    ends = [around.descend(start) for start in (nearest, grid.nearest(moved))]
    index, _, _ = min(ends, key=lambda end: end[1])
    return grid.values_at(index)


def _limited(part: Passive, option: ValueSet) -> Passive | None:
    """The part with only the values of `option` on offer."""
    if part.rule is None or part.fixed:
        return part
    offered = set(part.rule.values.tolist())
    items = tuple(
        StockItem(value=value, tolerance=part.rule.tolerance_of(value))
        for kind, value in sorted(option)
        if kind == part.kind and value in offered
    )
    return replace(part, rule=replace(part.rule, stock=items)) if items else None
