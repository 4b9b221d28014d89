"""One loop on a grid of frequencies, with many boards in it.

The response of every board is computed on the grid.  Between its points a board is interpolated
relative to the nominal one: ln(H / H nominal) is smooth, a polynomial through its neighbours
follows it closely, and the nominal loop itself, its delay included, is computed exactly wherever
it is asked for.  Boards whose 1 + L turns too fast for the grid to count its poles are counted
one by one.

Arrays have the axes (boards, frequencies).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.job import Loop
from synth.loop import loop_response
from synth.nodal import NodalProgram
from synth.nyquist import (
    ROUND,
    TURN,
    follows_target,
    freed_of_axis,
    is_decidable,
    turns_due,
    unstable_poles,
)
from synth.tolerance.drawing import Drawn
from synth.transfer import TransferFunction

__all__ = ["LoopSweep", "bracketed_roots", "crossings", "nearest", "picked", "wrapped"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]

DENSITY = 100
"""Points per decade within `NEAR` decades of any root."""

FAR_DENSITY = 25
NEAR, FAR = 2.0, 5.0
"""Decades beyond the lowest and the highest root: of dense points, and of any."""

ACROSS, BESIDE, WANDER = 10, 6.0, 0.12
"""Points across the half-width of a resonance, half-widths to either side that have them, and how
far (a ratio) tolerances may move it beyond that."""

DELAY_STEPS = np.arange(0.05, 12, 0.05)
"""Points where a delay turns the phase, in turns."""

CLOSEST = 1e-6
"""Points closer than this (a ratio) are one."""

GAIN_SLACK = 0.05
"""How much nearer to 1 [Np] a crossing may turn out than the grid says."""

HELD = 300_000
"""Boards times frequencies whose responses are held at once."""

STEPS, ROOT = 60, 1e-11
"""Most steps of a root search, and how near to 0 its function must come; less than what the
nodal engine promises."""


@dataclass(frozen=True, eq=False)
class LoopSweep:
    """One loop on its grid, shape (F,); `nominal` is H of the nominal board there."""

    program: NodalProgram
    loop: Loop
    target: TransferFunction
    sign: float
    grid: Real
    nominal: Complex
    reference: Complex
    asked: Complex

    @classmethod
    def of(
        cls, program: NodalProgram, loop: Loop, target: TransferFunction, sign: float
    ) -> LoopSweep:
        """The sweep for boards like that of `program`, which show `sign` times H(s) = `target`."""
        grid = _grid(loop, target)
        nominal = sign * program.solve(grid)
        reference = loop_response(loop, lambda f: nominal)(grid)
        asked = loop_response(loop, target.response)(grid)
        return cls(program, loop, target, sign, grid, nominal, reference, asked)

    @property
    def parts(self) -> tuple[TransferFunction, TransferFunction]:
        """The plant and H(s)."""
        return self.loop.plant, self.target

    def at(self, frequency_hz: Real) -> Complex:
        """L of the nominal board."""
        return loop_response(self.loop, lambda f: self.sign * self.program.solve(f))(frequency_hz)

    def margins(self, drawn: Drawn, excess: Index | None = None) -> Real:
        """Crossover [Hz], phase margin [deg], gain margin [dB], disk margin and unstable poles of
        the boards drawn, shape (5, boards); NaN where `LoopMargins` has None.  `excess` is how many
        poles each board by itself has right of the axis beyond those of H(s); None: none."""
        if excess is None:
            excess = np.zeros(len(drawn.values), dtype=np.intp)
        count = max(1, HELD // self.grid.size)
        parts = [slice(k, k + count) for k in range(0, len(drawn.values), count)]
        rows = [self._margins(drawn.part(part), excess[part]) for part in parts]
        return np.concatenate(rows, axis=1)

    def _margins(self, drawn: Drawn, excess: Index) -> Real:
        ratio = self.boards(self.grid, drawn) / self.nominal
        value = self.reference * ratio
        poles = self._unstable(ratio, value, drawn) + excess
        crossover, phase = self._phase(ratio, value)
        gain = self._gain(ratio, value)
        stable = poles == 0
        phase[stable], gain[stable] = np.abs(phase[stable]), np.abs(gain[stable])
        disk = np.where(stable | np.isnan(poles), self._disk(ratio, value), 0.0)
        return np.array([crossover, phase, gain, disk, poles])

    def _phase(self, ratio: Complex, value: Complex) -> tuple[Real, Real]:
        """Crossover and phase margin, NaN without one."""
        board, cell = crossings(np.log(np.abs(value)))
        between = _Between.cells(self, ratio, board, cell)
        x = between.roots(lambda loop: np.log(np.abs(loop)))
        phase = np.degrees(np.angle(-between(x)))
        best = nearest(board, np.abs(phase), len(value))
        return picked(np.exp(x), best), picked(phase, best)

    def _gain(self, ratio: Complex, value: Complex) -> Real:
        """Gain margin with its sign [dB], NaN without one."""
        board, cell = crossings(value.imag)
        left = (value.real[board, cell] < 0) & (value.real[board, cell + 1] < 0)
        board, cell = board[left], cell[left]
        ends = np.log(np.abs([value[board, cell], value[board, cell + 1]]))
        rough, reach = np.abs(ends.mean(axis=0)), np.abs(np.diff(ends, axis=0)[0]) / 2 + GAIN_SLACK
        most = np.full(len(value), np.inf)
        np.minimum.at(most, board, rough + reach)
        left = rough - reach <= most[board]
        board, cell = board[left], cell[left]
        between = _Between.cells(self, ratio, board, cell)
        size = np.log(np.abs(between(between.roots(lambda loop: loop.imag / np.abs(loop)))))
        if sum(tf.poles_at_origin - tf.zeros_at_origin for tf in self.parts) == 0:
            at_dc = np.flatnonzero(value.real[:, 0] < 0)
            board = np.concatenate([board, at_dc])
            size = np.concatenate([size, np.log(np.abs(value.real[at_dc, 0]))])
        best = nearest(board, np.abs(size), len(value))
        return -20 / math.log(10) * picked(size, best)

    def _disk(self, ratio: Complex, value: Complex) -> Real:
        """Disk margin as if every loop was stable."""

        def inverse(loop: Complex) -> Real:
            with np.errstate(divide="ignore", invalid="ignore"):
                return np.asarray(np.nan_to_num(np.abs(2 * (1 + loop) / (1 - loop)), nan=np.inf))

        rows = np.arange(len(value))
        sizes = inverse(value)
        place = np.argmin(sizes, axis=1)
        best = sizes[rows, place]
        between = _Between.around(self, ratio, rows, place)
        low, high = between.low, between.high
        for _ in range(5):
            x = np.linspace(low, high, 17, axis=1)
            sizes = inverse(between(x))
            k = np.argmin(sizes, axis=1)
            best = np.minimum(best, sizes[rows, k])
            low, high = x[rows, np.maximum(k - 1, 0)], x[rows, np.minimum(k + 1, 16)]
        return np.asarray(best)

    def _unstable(self, ratio: Complex, value: Complex, drawn: Drawn) -> Real:
        """Closed-loop poles in the right half-plane, NaN where that is not decided."""
        if not is_decidable(self.target):
            return np.full(len(value), np.nan)
        angle = np.angle(freed_of_axis(self.grid, value, self.parts))
        steps = wrapped(np.diff(angle, axis=1))
        if self.target.poles_at_origin:
            alike = follows_target(value, self.asked, self.target)
            start = np.where(alike.any(axis=1), alike.argmax(axis=1), 0)
            steps[np.arange(steps.shape[1]) < start[:, None]] = 0.0
        size = np.abs(value)
        wide = (np.abs(steps) > TURN) & (np.maximum(size[:, 1:], size[:, :-1]) > ROUND)
        board, cell = np.nonzero(wide)
        unsettled = np.asarray(~np.isfinite(steps).all(axis=1))
        if board.size:
            between = _Between.cells(self, ratio, board, cell)
            x = np.linspace(between.low, between.high, 33, axis=1)
            loop = between(x)
            finer = wrapped(np.diff(np.angle(freed_of_axis(np.exp(x), loop, self.parts)), axis=1))
            steps[board, cell] = finer.sum(axis=1)
            unsettled[board[~(np.abs(finer) <= TURN).all(axis=1)]] = True
        poles = np.round(turns_due(self.parts) - np.nan_to_num(steps).sum(axis=1) / math.pi)
        for k in np.flatnonzero(unsettled):
            poles[k] = self._one_by_one(drawn.part(slice(k, k + 1)), value[k])
        return np.asarray(poles)

    def boards(self, frequency_hz: Real, drawn: Drawn) -> Complex:
        """H of the boards drawn, shape (boards, frequencies)."""
        return self.sign * self.program.solve(
            frequency_hz, values=drawn.values, gain_bandwidth=drawn.gain_bandwidth
        )

    def _one_by_one(self, one: Drawn, value: Complex) -> float:
        response = loop_response(self.loop, lambda f: self.boards(f, one)[0])
        count = unstable_poles(
            self.parts, response, self.grid, value, delay=self.loop.delay, asked=self.asked
        )
        return math.nan if count is None else float(count)


@dataclass(frozen=True, eq=False)
class _Between:
    """Boards between points of the grid: one row a place, where ln of a board's ratio to the
    nominal one is a polynomial in x = ln(frequency in Hz) through `nodes`, from `low` to `high`."""

    sweep: LoopSweep
    nodes: Real
    logarithm: Complex
    low: Real
    high: Real

    @classmethod
    def cells(cls, sweep: LoopSweep, ratio: Complex, board: Index, cell: Index) -> _Between:
        """From point `cell` to the next one, by four neighbours."""
        return cls._through(sweep, ratio, board, (cell - 1, 4), (cell, cell + 1))

    @classmethod
    def around(cls, sweep: LoopSweep, ratio: Complex, board: Index, point: Index) -> _Between:
        """From the point before `point` to the one after it, by five neighbours."""
        return cls._through(sweep, ratio, board, (point - 2, 5), (point - 1, point + 1))

    @classmethod
    def _through(
        cls,
        sweep: LoopSweep,
        ratio: Complex,
        board: Index,
        nodes: tuple[Index, int],
        ends: tuple[Index, Index],
    ) -> _Between:
        x = np.log(sweep.grid)
        first = np.clip(nodes[0], 0, x.size - nodes[1])
        columns = first[:, None] + np.arange(nodes[1])
        found = ratio[board[:, None], columns]
        logarithm = np.log(np.abs(found)) + 1j * np.unwrap(np.angle(found), axis=1)
        low, high = (x[np.clip(end, 0, x.size - 1)] for end in ends)
        return cls(sweep, x[columns], logarithm, low, high)

    def __call__(self, x: Real) -> Complex:
        """L at x, shape (places,) or (places, points)."""
        wide = x if x.ndim == 2 else x[:, None]
        total = np.zeros(wide.shape, dtype=complex)
        count = self.nodes.shape[1]
        for k in range(count):
            weight = np.ones(wide.shape)
            for m in (m for m in range(count) if m != k):
                apart = self.nodes[:, k] - self.nodes[:, m]
                weight *= (wide - self.nodes[:, m, None]) / apart[:, None]
            total += weight * self.logarithm[:, k, None]
        loop = self.sweep.at(np.exp(wide).ravel()).reshape(wide.shape) * np.exp(total)
        return loop if x.ndim == 2 else loop[:, 0]

    def roots(self, quantity: Callable[[Complex], Real]) -> Real:
        """Where a quantity of L that changes its sign from `low` to `high` is 0."""
        return bracketed_roots(lambda x: quantity(self(x)), self.low, self.high)


def bracketed_roots(
    function: Callable[[Real], Real],
    low: Real,
    high: Real,
    ends: tuple[Real, Real] | None = None,
) -> Real:
    """Where a function, of one place each, that changes its sign from `low` to `high` is 0;
    `ends` are its values there, where these are known.

    Illinois method: a secant that halves the value of an end that stays twice.  Where rounding
    hides the change of sign it is at the end with the smaller value.
    """
    at_low, at_high = ends or (function(low), function(high))
    done = (at_low < 0) == (at_high < 0)
    found = np.where(np.abs(at_low) < np.abs(at_high), low, high)
    x, was_left = low, np.zeros(low.shape, dtype=np.int8)
    for _ in range(STEPS):
        step = at_high - at_low
        with np.errstate(divide="ignore", invalid="ignore"):
            x = high - at_high * (high - low) / step
        x = np.where(np.isfinite(x) & (x >= low) & (x <= high), x, (low + high) / 2)
        here = function(x)
        # A place that is found stays, however long others take.
        now = ~done & (np.abs(here) < ROOT)
        found[now], done = x[now], done | now
        if done.all():
            break
        left = np.where(np.sign(here) == np.sign(at_low), 1, -1).astype(np.int8)
        again = left == was_left
        moves_low = left > 0
        at_high = np.where(moves_low, np.where(again, at_high / 2, at_high), here)
        at_low = np.where(moves_low, here, np.where(again, at_low / 2, at_low))
        low, high = np.where(moves_low, x, low), np.where(moves_low, high, x)
        was_left = left
    return np.where(done, found, x)


def crossings(value: Real) -> tuple[Index, Index]:
    """Boards and the points after which `value` changes its sign."""
    board, cell = np.nonzero((value[:, :-1] < 0) != (value[:, 1:] < 0))
    return board, cell


def nearest(board: Index, size: Real, boards: int) -> Index:
    """Which entry of each board is the smallest; -1 for a board without one."""
    order = np.argsort(-size, kind="stable")
    best = np.full(boards, -1)
    best[board[order]] = order  # the last one written stays
    return best


def picked(values: Real, place: Index) -> Real:
    """The value at each place, NaN at -1."""
    return np.append(values, np.nan)[place]


def wrapped(angle: Real) -> Real:
    """Angles [rad] within +-pi."""
    return np.asarray(angle - 2 * np.pi * np.round(angle / (2 * np.pi)))


def _grid(loop: Loop, target: TransferFunction) -> Real:
    """Frequencies beyond every root, dense where boards may resonate or the delay turns [Hz]."""
    factors = [
        f
        for tf in (loop.plant, target)
        for f in (*tf.pole_factors, *tf.zero_factors)
        if f.natural_frequency
    ]
    corners = np.log10([f.natural_frequency / (2 * np.pi) for f in factors] or [1.0])
    low, high = corners.min(), corners.max()
    points = [
        np.linspace(low - FAR, high + FAR, round(FAR_DENSITY * (high - low + 2 * FAR))),
        np.linspace(low - NEAR, high + NEAR, round(DENSITY * (high - low + 2 * NEAR))),
    ]
    for factor in (f for f in factors if f.degree == 2 and abs(f.q) > 1 and math.isfinite(f.q)):
        width = 1 / (2 * abs(factor.q))
        reach = BESIDE * width + WANDER
        offsets = np.linspace(-reach, reach, 2 * round(ACROSS * reach / width) + 1)
        points.append(math.log10(factor.natural_frequency / (2 * np.pi)) + offsets / math.log(10))
    grid = 10 ** np.concatenate(points)
    if loop.delay:
        grid = np.concatenate([grid, DELAY_STEPS / loop.delay])
    grid = np.unique(grid)
    grid = grid[np.append(True, np.diff(np.log(grid)) > CLOSEST)]
    for factor in (f for f in factors if math.isinf(f.q)):
        f0 = factor.natural_frequency / (2 * np.pi)
        grid = grid[np.abs(grid / f0 - 1) > CLOSEST]
    return np.asarray(grid)
