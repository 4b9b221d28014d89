"""Capacitors at values that can be bought, and room for the values the job fixes.

Capacitors come first because their series are coarse: the levels then adapt to them.  Of a
stock no more are taken than there are.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from synth.errors import RealizationError
from synth.fixing import FixedParts
from synth.job import Job
from synth.scaling.constraints import LARGEST_MISS, Region, refuse, refuse_fixed
from synth.scaling.variables import Variables

__all__ = ["room_for", "with_standard_capacitors"]

Real = NDArray[np.float64]

# Limits missed by less than this, in ln, hold.
SLACK = 1e-7


def room_for(
    variables: Variables, limits: Region, start: Real, held: FixedParts
) -> tuple[Region, Real]:
    """The region in which the fixed values are missed by as little as can be, and a point
    inside; without fixed values `limits` and `start` themselves.

    Raises
    ------
    RealizationError
        The fixed values are missed by too much.
    """
    if not np.any(limits.fixed):
        return limits, start
    point, miss = limits.least_miss()
    if miss > LARGEST_MISS:
        raise refuse_fixed(variables, limits, point, held)
    eased = limits.eased(miss + SLACK)
    return eased, eased.start()[0]


def with_standard_capacitors(
    variables: Variables, job: Job, limits: Region, v: Real, held: FixedParts
) -> tuple[Region, Real]:
    """The region with every capacitor at a standard value, and a point inside.

    Each takes the value nearest to where it stands; one that then leaves no room is moved
    along the series, nearest first.

    Raises
    ------
    RealizationError
        No standard values leave room for the rest.
    """
    rule = job.board.capacitors
    offered = rule.values
    taken = Counter(held.sizes.values())
    choosable = [b for b in variables.graph.blocks if b.is_integrator and b.name not in held.sizes]
    chosen, point = limits, v
    good = SLACK + (limits.least_miss()[1] if np.any(limits.fixed) else 0.0)
    for block in choosable:
        row = limits.names.index(f"capacitor of {block.name}")
        here = v[variables.size_place(block.name)]
        best: tuple[float, Region, Real, float] | None = None
        for value in offered[np.argsort(np.abs(np.log(offered) - here), kind="stable")]:
            count = rule.count_of(value)
            if count is not None and taken[value] >= count:
                continue
            lower, upper = chosen.lower.copy(), chosen.upper.copy()
            lower[row] = upper[row] = np.log(value)
            trial = replace(chosen, lower=lower, upper=upper)
            miss, start = _missed(trial)
            if best is None or miss < best[0] - 1e-12:
                best = (miss, trial, start, value)
            if miss < good:
                break
        if best is None:
            raise RealizationError(
                f"board.stock: no capacitor is left for {block.name}, expected more of them"
            )
        if best[0] >= good and (best[0] > LARGEST_MISS or not np.any(limits.fixed)):
            raise _refusal(variables, job, best[1], best[2], held)
        chosen, point = best[1], best[2]
        taken[best[3]] += 1
    chosen, point = room_for(variables, chosen, point, held)
    # Start from the unrounded optimum where it still fits, else from inside the region.
    moved = v.copy()
    for block in choosable:
        k = variables.size_place(block.name)
        moved[k] = chosen.lower[limits.names.index(f"capacitor of {block.name}")]
    return chosen, moved if float(np.max(chosen.excess(moved))) < SLACK else point


def _missed(trial: Region) -> tuple[float, Real]:
    """By how much a region's limits are missed at the best point, in ln, and the point."""
    if np.any(trial.fixed):
        point, miss = trial.least_miss()
        if np.isfinite(miss):
            return miss, point
    # Equal bounds leave no margin: judge the others with these rows widened by nothing.
    free = trial.without_fixed()
    point, _ = free.start()
    return float(np.max(free.excess(point))) + (10.0 if np.any(trial.fixed) else 0.0), point


def _refusal(
    variables: Variables, job: Job, limits: Region, v: Real, held: FixedParts
) -> RealizationError:
    """The error for a region without a point, at the point that misses least."""
    if float(np.max(limits.without_fixed().excess(v))) < SLACK:
        return refuse_fixed(variables, limits, v, held)
    return refuse(variables, job, v)
