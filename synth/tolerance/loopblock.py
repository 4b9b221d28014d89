"""Margins and unstable poles of a block of boards, by a `LoopScan`: fast, and mostly exact to
about 1e-7; margins of sharp crossings, where |L| runs along 1, may be a percent off.

Only places are looked at where a board of the block may cross 1, cross -180 deg or come nearest
to -1, by bounds on how far boards are from the nominal one.  A board that the scan does not
follow is done on the dense grid of `LoopSweep`.

The unstable poles of a board are those of the nominal loop, unless its curve passes -1 on the
other side.  With q = (1 + L board) / (1 + L nominal) = 1 + T (L board / L nominal - 1), T that
of the nominal loop, q cannot turn around 0 where |T (L board / L nominal - 1)| < 1 (the theorem
of Rouche; as in robust stability), so that turns are counted only in panels where that may fail,
and there of every board.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.loop import loop_response
from synth.nyquist import ROUND, TURN, freed_of_axis, is_decidable, turns_due
from synth.tolerance.drawing import Drawn
from synth.tolerance.loopscan import LoopScan
from synth.tolerance.loopsweep import GAIN_SLACK, bracketed_roots, nearest, picked, wrapped
from synth.tolerance.panels import DEGREE

__all__ = ["scanned_margins"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]
Mask = NDArray[np.bool_]

SAFE = 0.5
"""|T (L board / L nominal - 1)| below which no turn is counted: half of what would allow one, for
T between two points."""

MOST = 50.0
"""Largest bound that is put into an exponential [Np]."""

BEYOND = 1.0
"""How much farther from 1 [Np] than that of the nominal board a crossing of -180 deg is looked for,
at first."""

FINER, ROUNDS = 17, 5
"""Points across a cell in which 1 + L turns fast, and how often such cells are cut."""

SHRINKS, SHRINK = 3, 8.0
"""Rounds of the search for the place nearest to -1, and by what its steps shrink."""


def scanned_margins(scan: LoopScan, drawn: Drawn, excess: Index | None = None) -> Real:
    """As `LoopSweep.margins`."""
    if excess is None:
        excess = np.zeros(len(drawn.values), dtype=np.intp)
    apart = scan.apart(drawn)
    high = scan.panels.high_orders(apart)
    followed = scan.follows(apart, high)
    out, left = np.empty((5, followed.size)), ~followed
    kept = np.flatnonzero(followed)
    if kept.size:
        out[:, kept], left[kept] = _scanned(scan, apart[kept], high[kept], excess[kept])
    rest = np.flatnonzero(left)
    if rest.size:
        out[:, rest] = scan.sweep.margins(drawn.part(rest), excess[rest])
    return out


def _scanned(scan: LoopScan, apart: Complex, high: Complex, excess: Index) -> tuple[Real, Mask]:
    """The five results of boards that are followed, and those that are not settled."""
    bounds = scan.panels.bounds(apart, high)
    widest = bounds.max(axis=0)[scan.panel_of_point]
    boards = _Boards(scan, apart, apart + scan.nominal, widest)
    poles, unsettled = boards.unstable(bounds)
    poles += excess
    crossover, phase = boards.phase()
    gain = boards.gain()
    stable = poles == 0
    phase[stable], gain[stable] = np.abs(phase[stable]), np.abs(gain[stable])
    disk = np.where(stable | np.isnan(poles), boards.disk(), 0.0)
    return np.array([crossover, phase, gain, disk, poles]), unsettled


@dataclass(frozen=True, eq=False)
class _Boards:
    """A block of boards in a scan: ln of their responses at the nodes, `apart` over that of the
    nominal board and `whole` over H(s); at each point none is farther `apart` than `widest`."""

    scan: LoopScan
    apart: Complex
    whole: Complex
    widest: Real

    def at(self, board: Index, x: Real) -> Complex:
        """L of one board at each x = ln(frequency in Hz)."""
        sweep = self.scan.sweep
        reference = loop_response(sweep.loop, sweep.target.response)(np.exp(x))
        return np.asarray(reference * np.exp(self.scan.panels.at(self.whole, board, x)))

    def phase(self) -> tuple[Real, Real]:
        """Crossover and phase margin, NaN without one."""
        size = self.scan.logarithm.real
        near = np.abs(size) <= self.widest
        board, cell, ends = self._crossings(near, size < 0, lambda z: z.real)
        x = self._root(board, cell, lambda z: z.real, ends)
        phase = np.degrees(np.angle(-self.at(board, x)))
        best = nearest(board, np.abs(phase), len(self.apart))
        return picked(np.exp(x), best), picked(phase, best)

    def gain(self) -> Real:
        """Gain margin with its sign [dB], NaN without one."""
        logarithm = self.scan.logarithm
        crossed = np.diff(np.sin(logarithm.imag) < 0) & (np.cos(logarithm.imag[:-1]) < 0)
        size = np.abs(logarithm.real[:-1][crossed])
        most = float(size.min()) + BEYOND if size.size else math.inf
        found = self._gain(most)
        others = np.flatnonzero(~(np.abs(found) <= most))
        if others.size and math.isfinite(most):
            kept = _Boards(self.scan, self.apart[others], self.whole[others], self.widest)
            found[others] = kept._gain(math.inf)
        return -20 / math.log(10) * found

    def _gain(self, most: float) -> Real:
        """ln |L| nearest to 0 where L is negative, NaN without one; those beyond `most` may be
        overlooked."""
        logarithm = self.scan.logarithm
        near = np.abs(wrapped(logarithm.imag - np.pi)) <= self.widest
        board, cell, (left, right) = self._crossings(
            near,
            np.sin(logarithm.imag) < 0,
            lambda z: np.sin(z.imag),
            np.abs(logarithm.real) <= most + self.widest,
        )
        # Only those may be the nearest to 1 that are not farther than the end of another.
        rough = np.abs(left.real + right.real) / 2
        reach = np.abs(left.real - right.real) / 2 + GAIN_SLACK
        behind = np.cos(left.imag) < 0
        least = np.full(len(self.apart), np.inf)
        np.minimum.at(least, board[behind], (rough + reach)[behind])
        kept = behind & (rough - reach <= least[board])
        board, cell, ends = board[kept], cell[kept], (left[kept], right[kept])
        x = self._root(board, cell, lambda z: np.sin(z.imag), ends)
        size = np.log(np.abs(self.at(board, x)))
        if sum(tf.poles_at_origin - tf.zeros_at_origin for tf in self.scan.sweep.parts) == 0:
            first = np.exp(logarithm[0] + self.apart[:, 0]).real
            at_dc = np.flatnonzero(first < 0)
            board = np.concatenate([board, at_dc])
            size = np.concatenate([size, np.log(np.abs(first[at_dc]))])
        return picked(size, nearest(board, np.abs(size), len(self.apart)))

    def disk(self) -> Real:
        """Disk margin as if every loop was stable."""
        rows = np.arange(len(self.apart))
        with np.errstate(divide="ignore"):
            turn = np.arctan(_nearness(self.scan.loop))
        # u = (1 + L) / (1 - L): |du| = |u^2 - 1| / 2 |d ln L|, so that atan |u| moves by half of
        # d ln L at most.
        lowest, highest = turn - self.widest / 2, turn + self.widest / 2
        places = np.flatnonzero(lowest <= highest.min())
        sizes = _nearness(np.exp(self._logarithms(places)))
        found = np.argmin(sizes, axis=1)
        best, place = sizes[rows, found], places[found]
        x, last = self.scan.x, self.scan.x.size - 1
        low, high = x[np.maximum(place - 1, 0)], x[np.minimum(place + 1, last)]
        centre, step = x[place], (high - low) / 2
        for _ in range(SHRINKS):
            left, right = np.maximum(centre - step, low), np.minimum(centre + step, high)
            middle = (left + right) / 2
            a, b, c = (_nearness(self.at(rows, at)) for at in (left, middle, right))
            best = np.minimum(best, np.minimum(np.minimum(a, b), c))
            # |u|^2 is a parabola about its smallest value.
            with np.errstate(divide="ignore", invalid="ignore"):
                away = (a * a - c * c) / (a * a - 2 * b * b + c * c) / 2
            away = np.where(np.isfinite(away), np.clip(away, -1, 1), 0.0)
            centre, step = middle + away * (right - left) / 2, step / SHRINK
        return np.asarray(2 * best)

    def unstable(self, bounds: Real) -> tuple[Real, Mask]:
        """Closed-loop poles in the right half-plane, NaN where that is not decided, and the
        boards whose turns are not settled; `bounds` by board and panel."""
        scan, count = self.scan, len(self.apart)
        unsettled = np.zeros(count, dtype=bool)
        if not is_decidable(scan.sweep.target):
            return np.full(count, np.nan), unsettled
        risky = ~(np.expm1(np.minimum(bounds, MOST)) * scan.crest < SAFE)
        risky[:, : scan.start] = False
        rounds = np.zeros(count)
        for panel in np.flatnonzero(risky.any(axis=0)).tolist():
            rows = np.flatnonzero(risky[:, panel])
            turn, doubtful = self._turn(rows, panel)
            turn -= self._angle(rows, panel + 1) - self._angle(rows, panel)
            rounds[rows] += np.round(turn / (2 * np.pi))
            unsettled[rows[doubtful]] = True
        every = np.arange(count)
        turn = self._angle(every, scan.panels.count) - self._angle(every, scan.start)
        turn += scan.turns[scan.ends[scan.start] :].sum() + 2 * np.pi * rounds
        return np.round(turns_due(scan.sweep.parts) - turn / np.pi), unsettled

    def _turn(self, rows: Index, panel: int) -> tuple[Real, Mask]:
        """How much more than 1 + L of the nominal board that of these boards turns in a panel
        [rad], and for which of them that is in doubt."""
        scan = self.scan
        first, last = scan.ends[panel], scan.ends[panel + 1]
        x = scan.x[first : last + 1]
        value = scan.loop[first : last + 1] * np.exp(scan.panels.everywhere(self.apart[rows], x))
        steps = self._steps(np.exp(x), value)
        size = np.abs(value)
        wide = (np.abs(steps) > TURN) & (np.maximum(size[:, 1:], size[:, :-1]) > ROUND)
        doubtful = np.asarray(~np.isfinite(steps).all(axis=1))
        row, cell = np.nonzero(wide)
        steps[row, cell] = 0.0
        turn = np.nan_to_num(steps).sum(axis=1) - scan.turns[first:last].sum()
        low, high = x[cell], x[cell + 1]
        for _ in range(ROUNDS):
            if not row.size:
                break
            finer = np.linspace(low, high, FINER, axis=1)
            loop = self.at(np.repeat(rows[row], FINER), finer.ravel()).reshape(finer.shape)
            steps = self._steps(np.exp(finer), loop)
            wide = ~(np.abs(steps) <= TURN)
            np.add.at(turn, row, np.where(wide, 0.0, steps).sum(axis=1))
            place, cell = np.nonzero(wide)
            row, low, high = row[place], finer[place, cell], finer[place, cell + 1]
        doubtful[row] = True
        return turn, doubtful

    def _steps(self, frequency_hz: Real, loop: Complex) -> Real:
        freed = freed_of_axis(frequency_hz, loop, self.scan.sweep.parts)
        return wrapped(np.diff(np.angle(freed), axis=1))

    def _angle(self, rows: Index, edge: int) -> Real:
        """Of 1 + L over that of the nominal board, on an edge of panels, within +-pi [rad]."""
        loop = self.scan.loop[self.scan.ends[edge]]
        with np.errstate(divide="ignore"):
            share = 1 / (1 + 1 / loop)
        return np.asarray(np.angle(1 + share * np.expm1(self.apart[rows, DEGREE * edge])))

    def _crossings(
        self,
        near: Mask,
        side: Mask,
        quantity: Callable[[Complex], Real],
        sought: Mask | None = None,
    ) -> tuple[Index, Index, tuple[Complex, Complex]]:
        """Boards and cells of the grid in which a quantity of ln L changes its sign, and ln L on
        either end; looked for beside points that are `near` and where the nominal one's changes,
        from one `side` to the other, but only beside points that are `sought` (None: all)."""
        looked = near[:-1] | near[1:] | (side[:-1] != side[1:])
        if sought is not None:
            looked &= sought[:-1] | sought[1:]
        cells = np.flatnonzero(looked)
        places = np.union1d(cells, cells + 1)
        logarithm = self._logarithms(places)
        below = quantity(logarithm) < 0
        at = np.searchsorted(places, cells)
        board, k = np.nonzero(below[:, at] != below[:, at + 1])
        ends = logarithm[board, at[k]], logarithm[board, at[k] + 1]
        return board, cells[k], ends

    def _logarithms(self, places: Index) -> Complex:
        """ln L at some points of the grid."""
        scan = self.scan
        return scan.logarithm[places] + scan.panels.everywhere(self.apart, scan.x[places])

    def _root(
        self,
        board: Index,
        cell: Index,
        quantity: Callable[[Complex], Real],
        ends: tuple[Complex, Complex],
    ) -> Real:
        """ln of the frequency at which a quantity of ln L is 0; `ends` is ln L beside it."""

        def function(x: Real) -> Real:
            return quantity(np.log(self.at(board, x)))

        x = self.scan.x
        return bracketed_roots(
            function, x[cell], x[cell + 1], (quantity(ends[0]), quantity(ends[1]))
        )


def _nearness(loop: Complex) -> Real:
    """|(1 + L) / (1 - L)|: 0 at -1, infinite at 1."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.nan_to_num(np.abs((1 + loop) / (1 - loop)), nan=np.inf))
