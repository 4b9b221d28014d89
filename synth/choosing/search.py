"""The joint search: kicks along the free scales, compensation, rounding, descent.

In every round the response is linear about the best values so far.  A kick either moves a
random part of the values, or gives the parts that bind (see `synth.choosing.binding`) one of
the sets of values that hurt least; capacitors go to standard values, the resistors make up for
the error by the smallest change, everything is rounded, and the descent follows.  The best
candidates of a round are judged by the nodal engine on the whole circuit, and the best of
them is the reference of the next round.  Deterministic for a seed; no result depends on the
clock.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from synth.choosing.binding import Frontier, binding_order
from synth.choosing.descent import Neighbourhood
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Ceilings, Goal, LevelLimits, LinearModel, compensation
from synth.choosing.supply import Supply
from synth.nodal import NodalProgram

__all__ = ["SearchOutcome", "search_values"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# Size of the kicks in each round, as a ratio of the value.
KICKS = (0.25, 0.12, 0.06, 0.04)
KICKS_ABOUT_KNOWN = (0.06, 0.04)

# Where the steps between values are coarser than this, in ln, kicks are no smaller than they.
COARSE_STEP = 0.15

# Room below the ceilings that a kick leaves for the descent, in ln; half a step of a coarse
# series is more.
HEADROOM = 0.02

# Added to the mean square of what is above a ceiling: far more than any error there is.
BEYOND = 1e9

# A round ends when it has not gained for this share of the work it may do.
STALLED = 0.6

# What a kick costs beside the neighbourhoods it leads to, in pairs of steps.
PAIRS_PER_KICK = 10_000

# Share of the kicks that start from values of the binding parts, and how many sets of these
# are kept.
BINDING_SHARE = 0.5
BINDING_STARTS = 400
BINDING_BEAM = 4000

# Pairs of steps that justify keeping one more set: a search of little effort keeps fewer.
EFFORT_PER_SET = 15_000

# Steps along the list of values; from a stock, also over values that are used up.
REACH = (1, 2, 3)
REACH_OF_STOCK = (1, 2, 3, 4, 6)

# How many candidates of a round the nodal engine judges.
CANDIDATES = 24


@dataclass(frozen=True, kw_only=True)
class SearchOutcome:
    """The chosen values, their error, and the work it took.

    `index` is into the grid, `rms` the root mean square of |ln(H/T)| by the nodal engine,
    `looked` the number of pairs of steps evaluated.
    """

    index: Index
    rms: float
    looked: int


@dataclass
class _Pool:
    """The best distinct candidates of a round."""

    size: int
    heap: list[tuple[float, int, tuple[int, ...]]] = field(default_factory=list)
    seen: set[tuple[int, ...]] = field(default_factory=set)
    counter: int = 0

    def offer(self, index: Index, cost: float) -> None:
        key = tuple(int(k) for k in index)
        if key in self.seen:
            return
        self.seen.add(key)
        self.counter += 1
        heapq.heappush(self.heap, (-cost, self.counter, key))
        if len(self.heap) > self.size:
            heapq.heappop(self.heap)

    def members(self) -> list[Index]:
        return [np.array(key) for _, _, key in sorted(self.heap, reverse=True)]


def search_values(
    program: NodalProgram,
    grid: ValueGrid,
    goal: Goal,
    *,
    start_logs: Real,
    ideal: NodalProgram,
    ceilings: Ceilings | None,
    supply: Supply | None,
    known: Index | None = None,
    seed: int,
    effort: int,
) -> SearchOutcome:
    """Standard values for the least response error of the whole circuit.

    Parameters
    ----------
    goal
        The response to be shown.
    start_logs
        ln of the ideal values, shape (P,): where the search starts.
    ideal
        The same circuit with ideal op-amps.
    ceilings
        How far op-amp outputs may rise; a candidate beyond them is not taken while there is
        another.
    supply
        How many parts of every value there are; None for enough.
    known
        A choice to be improved on in rounds of its own, half as many.
    effort
        Pairs of steps to be evaluated in all rounds together, about; the search stops by
        this count alone, or when rounds no longer gain.
    """
    rng = np.random.default_rng(seed)
    least = coarse_step(grid)
    beam = min(BINDING_BEAM, effort // EFFORT_PER_SET)

    def climbed(
        start: Index, reference: Real, kicks: tuple[float, ...]
    ) -> tuple[Index, float, int]:
        best, looked = start, 0
        if supply is not None:
            best = supply.repaired(best, LinearModel.about(program, reference, goal))
        best_square = float(_judged(program, grid, goal, ceilings, [best])[0])
        for kick in (max(k, least) for k in kicks):
            model = LinearModel.about(program, reference, goal)
            skeleton = LinearModel.about(program, reference, goal, jacobian=ideal)
            one = _Round(
                grid,
                model,
                limits=None if ceilings is None else ceilings.about(program, reference),
                supply=supply,
                starts=binding_starts(grid, skeleton, beam=beam),
                kick=kick,
                rng=rng,
            )
            pool = one.run(best, effort // len(KICKS))
            looked += one.looked
            members = pool.members()
            if not members:
                continue
            squares = _judged(program, grid, goal, ceilings, members)
            k = int(np.argmin(squares))
            if squares[k] < best_square:
                best, best_square = members[k], float(squares[k])
            reference = grid.values_at(best)
        return best, best_square, looked

    best, square, looked = climbed(grid.nearest(start_logs), np.exp(start_logs), KICKS)
    if known is not None:
        other = climbed(known, grid.values_at(known), KICKS_ABOUT_KNOWN)
        looked += other[2]
        if other[1] < square:
            best = other[0]
    (square,) = goal.mean_squares(program, grid.values_at(best)[None, :])
    return SearchOutcome(index=best, rms=float(np.sqrt(square)), looked=looked)


def _judged(
    program: NodalProgram,
    grid: ValueGrid,
    goal: Goal,
    ceilings: Ceilings | None,
    candidates: list[Index],
) -> Real:
    """Mean square error of each by the nodal engine, worse than any other where an output leaves
    its bounds, which the linear limits of a round may miss."""
    values = np.array([grid.values_at(k) for k in candidates])
    squares = goal.mean_squares(program, values)
    if ceilings is None:
        return squares
    return np.where(ceilings.keep(program, values), squares, squares + BEYOND)


def coarse_step(grid: ValueGrid) -> float:
    """The median step between values of the resistors, in ln, where it is coarse; else 0."""
    lists = [v for v, free in zip(grid.values, grid.resistors, strict=True) if free and v.size > 1]
    steps = [float(np.median(np.diff(np.log(values)))) for values in lists]
    return max((s for s in steps if s > COARSE_STEP), default=0.0)


@dataclass(frozen=True, eq=False)
class BindingStarts:
    """Sets of values of the parts that bind, those first whose bound is lowest.

    `parts` (n,), `index` (n, N) into the grid.
    """

    parts: Index
    index: Index


def binding_starts(
    grid: ValueGrid, skeleton: LinearModel, *, beam: int = BINDING_BEAM
) -> BindingStarts | None:
    """Values of the binding parts, grown set by set; None where no part binds.

    After each part the best `beam` sets are kept.  Of equal bounds, as decades repeat them,
    those nearest to the reference come first.
    """
    order, binding = binding_order(skeleton.matrix, grid)
    frontier = Frontier.start(skeleton, grid)
    for place, part in enumerate(order[:binding]):
        columns = skeleton.matrix[:, order[place + 1 :]]
        frontier = frontier.grown_best(part, columns, count=max(beam, 1))
    if not frontier.parts:
        return None
    return BindingStarts(np.array(frontier.parts), frontier.chosen[:, :BINDING_STARTS])


class _Round:
    """One round of kicks about one linear model."""

    def __init__(
        self,
        grid: ValueGrid,
        model: LinearModel,
        *,
        limits: LevelLimits | None,
        supply: Supply | None,
        starts: BindingStarts | None,
        kick: float,
        rng: np.random.Generator,
    ) -> None:
        self.grid, self.model, self.limits, self.supply = grid, model, limits, supply
        self.starts, self.kick, self.rng = starts, kick, rng
        self.continuous = np.flatnonzero(grid.fine)
        others = model.without(self.continuous) if self.continuous.size else model
        reach = REACH if supply is None else REACH_OF_STOCK
        self.coarse = Neighbourhood(grid, others, reach, supply=supply)
        self.fine = Neighbourhood(grid, others, reach, quads=160, supply=supply)
        free = grid.resistors
        self.compensation = np.zeros((free.size, model.offset.size))
        self.compensation[free] = compensation(model.matrix[:, free])
        self.headroom = max(HEADROOM, grid.resistor_step / 2)
        self.looked = 0

    def run(self, start: Index, effort: int) -> _Pool:
        pool = _Pool(CANDIDATES)
        here, cost = self._descend(self.coarse, start)
        self._offer(pool, here, cost)
        best, best_cost = here, cost
        gained = self.looked
        while self.looked < effort and self.looked - gained < STALLED * effort:
            self.looked += PAIRS_PER_KICK
            base = best if self.rng.random() < 0.6 else here
            trial, cost_trial = self._descend(self.coarse, self._kicked(base))
            if cost_trial < 2 * best_cost:
                trial, cost_trial = self._descend(self.fine, trial)
            if not self._offer(pool, trial, cost_trial):
                continue
            if cost_trial < 1.5 * cost:
                here, cost = trial, cost_trial
            if cost_trial < best_cost:
                best, best_cost, gained = trial, cost_trial, self.looked
        return pool

    def _descend(self, neighbourhood: Neighbourhood, index: Index) -> tuple[Index, float]:
        if self.supply is not None:
            index = self.supply.repaired(index, self.model)
        index, cost, looked = neighbourhood.descend(index)
        self.looked += looked * neighbourhood.pairs
        if self.continuous.size:
            logs, free = self.grid.logs_at(index), self.continuous
            logs[free] -= compensation(self.model.matrix[:, free]) @ self.model.residual(logs)
            index = self.grid.nearest(logs)
            residual = self.model.residual(self.grid.logs_at(index))
            cost = float(residual @ residual)
        return index, cost

    def _offer(self, pool: _Pool, index: Index, cost: float) -> bool:
        if self.limits is not None and not self.limits.hold(self.grid.logs_at(index)):
            return False
        pool.offer(index, cost)
        return True

    def _kicked(self, index: Index) -> Index:
        """`index` with a random part of the values moved and the resistors making up for it."""
        if self.starts is not None and self.rng.random() < BINDING_SHARE:
            return self._bound(index, self.starts)
        count = index.size
        moved = self.rng.random(count) < self.rng.uniform(0.1, 0.6)
        logs = self.grid.logs_at(index) + moved * self.rng.normal(0.0, self.kick, count)
        standard = self.grid.logs_at(self.grid.nearest(logs))
        logs = np.where(self.grid.capacitors, standard, logs)
        logs = logs - self.compensation @ self.model.residual(logs)
        return self.grid.nearest(self._below_ceilings(logs))

    def _bound(self, index: Index, starts: BindingStarts) -> Index:
        """`index` with the binding parts at one of their sets of values, better ones more
        often, and all other resistors making up for it."""
        sets = starts.index.shape[1]
        chosen = int(sets * self.rng.random() ** 3)
        logs = self.grid.logs_at(index)
        given = self.grid.logs[starts.parts, starts.index[:, chosen]]
        logs[starts.parts] = given
        others = self.grid.resistors.copy()
        others[starts.parts] = False
        logs[others] -= compensation(self.model.matrix[:, others]) @ self.model.residual(logs)
        out = self.grid.nearest(self._below_ceilings(logs))
        out[starts.parts] = starts.index[:, chosen]
        return out

    def _below_ceilings(self, logs: Real) -> Real:
        """The nearest values with the same response whose op-amp outputs have room left."""
        if self.limits is None:
            return logs
        for _ in range(3):
            excess = self.limits.excess(logs) + self.headroom
            over = excess > 0
            if not np.any(over):
                break
            free = self.grid.resistors
            rows = np.concatenate([self.model.matrix, self.limits.matrix[over]])[:, free]
            wanted = np.concatenate([self.model.residual(logs), excess[over]])
            logs = logs.copy()
            logs[free] -= compensation(rows) @ wanted
        return logs
