"""One system with the plan that solves it, and the watch over its accuracy.

The elimination has a fixed order, so nothing pivots when it runs.  Its accuracy is therefore
measured: when a plan is chosen, on the nominal board and on boards far from it, over all
frequencies at which the circuit does anything; and when it runs outside what was measured, on a
sample of what it was asked for.  Where a plan fails, LAPACK solves instead: slower, same result.
"""

from __future__ import annotations

import contextlib
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError
from synth.nodal import dense
from synth.nodal.plan import Plan, plan
from synth.nodal.reduction import REMEMBERED, Reduction, quantities
from synth.nodal.region import Boards, Region
from synth.nodal.structure import Structure

__all__ = ["Engine", "LazyEngine", "choose_engine"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

RELATIVE_ERROR = 1e-10
"""Relative error a plan may always have."""

ROUNDING = 64.0
"""... or this many times what one unit of rounding in every entry causes, where that is more."""

TRIES = 12
"""Plans drawn with free pivots for one unknown; the cheapest that is accurate enough is taken."""

FLOW_TRIES = 3
"""Plans drawn along the signal flow, for one unknown or many."""

COMPILE_AFTER = 1500
"""Samples solved by LAPACK before a plan is looked for, which takes about as long."""

SAMPLES = 64
"""Samples checked in a call outside the trusted region, and solved at once by LAPACK times 64."""


@dataclass(frozen=True, eq=False)
class Engine:
    """Solves one system for some of its unknowns.

    Parameters
    ----------
    structure
        Of the circuit.
    wanted
        The unknowns, numbered as in the structure.
    observed
        None for the equations themselves; for the transposed ones, the net observed.
    chosen
        The plan, or None where none was accurate enough.
    region
        Where the plan was measured, and is trusted without a check.
    silent
        Unknowns that are 0 whatever the values are.
    """

    structure: Structure
    wanted: tuple[int, ...]
    observed: int | None
    chosen: Plan | None
    region: Region
    silent: frozenset[int]

    def solve(self, boards: Boards, s: Complex) -> Complex:
        """The wanted unknowns, shape (wanted, boards, F); `s` shape (F,) [rad/s].

        Raises
        ------
        NumericalError
            A singular sample.
        """
        if not (self.wanted and s.size and boards.count):
            return np.zeros((len(self.wanted), boards.count, s.size), dtype=complex)
        if self.chosen is None:
            return self._by_lapack(boards, s)
        quantity = quantities(
            self.structure, boards.values, boards.gain_bandwidth, boards.open_loop_gain
        )
        with np.errstate(all="ignore"):
            solved = self.chosen.solve(quantity, s)
        if not self.region.holds(boards, s):
            board, point = _spread(boards.count, s.size)
            if not self._agrees(boards, s, board, point, solved[:, board, point].T):
                return self._by_lapack(boards, s)
        if not np.isfinite(solved.sum()):
            board, point = np.nonzero(~np.isfinite(solved).all(axis=0))
            solved[:, board, point] = self._samples_by_lapack(boards, s, board, point).T
        return solved

    def _agrees(
        self,
        boards: Boards,
        s: Complex,
        board: NDArray[np.intp],
        point: NDArray[np.intp],
        solved: Complex,
    ) -> bool:
        """Whether `solved`, shape (samples, wanted), is as accurate as it can be asked to be."""
        y, a = boards.samples(self.structure, s, board, point)
        exact, rounding = dense.reference(self.structure, y, a, observed=self.observed)
        columns = list(self.wanted)
        return _is_accurate(solved, exact[:, columns], rounding[:, columns])

    def _by_lapack(self, boards: Boards, s: Complex) -> Complex:
        out = np.empty((len(self.wanted), boards.count, s.size), dtype=complex)
        step = max(1, SAMPLES * 64 // s.size)
        for start in range(0, boards.count, step):
            part = boards.part(start, start + step)
            board, point = np.indices((part.count, s.size)).reshape(2, -1)
            solved = self._samples_by_lapack(part, s, board, point)
            out[:, start : start + step] = solved.T.reshape(-1, part.count, s.size)
        return out

    def _samples_by_lapack(
        self, boards: Boards, s: Complex, board: NDArray[np.intp], point: NDArray[np.intp]
    ) -> Complex:
        y, a = boards.samples(self.structure, s, board, point)
        if self.observed is None:
            solved = dense.solve_samples(self.structure, y, a)
        else:
            solved = dense.solve_transposed(self.structure, y, a, self.observed)
        picked = solved[:, list(self.wanted)]
        picked[:, [k for k, w in enumerate(self.wanted) if w in self.silent]] = 0.0
        return picked


def choose_engine(
    structure: Structure,
    system: Reduction,
    wanted: tuple[int, ...],
    *,
    observed: int | None = None,
) -> Engine:
    """The engine with the cheapest plan that is accurate on every board it is measured on."""
    region = Region.of(structure)
    none = Engine(structure, wanted, observed, None, region, system.silent())
    if not wanted:
        return none
    boards, s = region.boards(), region.frequencies()
    board, point = np.indices((boards.count, s.size)).reshape(2, -1)
    columns = list(wanted)
    try:
        exact, rounding = dense.reference(
            structure, *boards.samples(structure, s, board, point), observed=observed
        )
    except NumericalError:
        return none
    quantity = quantities(structure, boards.values, boards.gain_bandwidth, boards.open_loop_gain)
    for candidate in _candidates(system, wanted):
        with np.errstate(all="ignore"):
            solved = candidate.solve(quantity, s)[:, board, point].T
        if _is_accurate(solved, exact[:, columns], rounding[:, columns]):
            return replace(none, chosen=candidate)
    return none


class LazyEngine:
    """An engine that is chosen once it has been asked for enough to be worth it.

    Until then LAPACK solves, so that a circuit solved once costs no choice of a plan.
    """

    def __init__(
        self,
        structure: Structure,
        system: Reduction,
        wanted: tuple[int, ...],
        *,
        observed: int | None = None,
    ) -> None:
        self._system = system
        self._asked = 0
        self._is_chosen = False
        self._engine = Engine(
            structure, wanted, observed, None, Region.of(structure), system.silent()
        )

    def solve(self, boards: Boards, s: Complex) -> Complex:
        """As `Engine.solve`."""
        self._asked += boards.count * s.size
        if not self._is_chosen and self._asked >= COMPILE_AFTER:
            had = self._engine
            self._engine = choose_engine(
                had.structure, self._system, had.wanted, observed=had.observed
            )
            self._is_chosen = True
        return self._engine.solve(boards, s)


@lru_cache(maxsize=REMEMBERED)
def _candidates(system: Reduction, wanted: tuple[int, ...]) -> tuple[Plan, ...]:
    """Plans to measure, the cheapest first: with free pivots for one unknown, along the signal
    flow for any."""
    drawn = []
    if len(wanted) == 1:
        drawn += [plan(system, wanted, np.random.default_rng(k)) for k in range(TRIES)]
    with contextlib.suppress(ArithmeticError):
        drawn += [
            plan(system, wanted, np.random.default_rng(k), along_flow=True)
            for k in range(FLOW_TRIES)
        ]
    return tuple(sorted(drawn, key=lambda p: p.tape.cost))


def _is_accurate(solved: Complex, exact: Complex, rounding: Real) -> bool:
    """Whether every unknown is within its allowed relative error; shapes (samples, wanted)."""
    allowed = np.maximum(RELATIVE_ERROR, ROUNDING * rounding)
    with np.errstate(all="ignore"):
        close = np.abs(solved - exact) <= allowed * np.abs(exact)
    # An unknown that is 0, or noise where it should be 0, carries no scale of its own.
    return bool(np.all(close | ~(rounding < 1e-3)))


def _spread(boards: int, frequencies: int) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Pairs of board and frequency index spread over all samples, ends included."""
    total = boards * frequencies
    flat = np.unique(np.linspace(0, total - 1, min(SAMPLES, total)).round().astype(np.intp))
    return flat // frequencies, flat % frequencies
