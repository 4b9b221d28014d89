"""What no board passes at any frequency of the band, those between the judged ones included.

Around every frequency lies a cell, eta to either side in u = ln(omega).  A frequency e^v times as
high multiplies every capacitor and every s/(2 pi GBW) by e^v; both are variables here, W of them,
beside the parts.  A cell is bounded in one of two ways:

- By a slope: the error rises from its bound in the middle by at most eta times the largest
  |Re c (ln H - ln T)'|, where (ln det(I + X D))' = sum over W of (1 + D_w) R_ww with
  R = (I + X D)^-1 X = X - X D X + ...  The terms without D and with one D_j are taken as they
  are, numerator, denominator and target together; beyond that |R| is at most
  Z^2 (I - Z)^-1 |X|, Z = |X| diag of the largest |D_j| (see `synth.worstcase.enclosure`).
- As one box, in which frequency widens the range of every capacitor and op-amp by itself, and
  the target moves by itself: wider, but good where no series converges.

The cell with the highest bound is cut in half until none passes the goal, or the work is done.
Derivatives of ln T come from its roots: s/(s - r) of a root r, then -s r/(s - r)^2, then
s r (s + r)/(s - r)^3.
"""

from __future__ import annotations

import heapq
import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.transfer import TransferFunction
from synth.worstcase.boxes import at_once
from synth.worstcase.enclosure import HOPELESS, enclose
from synth.worstcase.expansion import Expansion, Parts
from synth.worstcase.groups import independent_groups

__all__ = ["Cover"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]

STRONG = 8
"""Parts whose corners are gone through in a cell: many cells do better than careful ones."""

GOAL = 1.045
"""A bound is good enough where it is at most this many times what some board reaches."""

CELLS = 8
"""Cells taken up at once."""

ON_THE_AXIS = 1e-9
"""Real part of a zero on the imaginary axis at most, against its size."""

CELL_WORK = 20_000
"""Work of a cell beside its arrays."""


@dataclass(frozen=True, eq=False)
class Cover:
    """The cells of a circuit.

    Parameters
    ----------
    parts
        Of the circuit.
    target
        T(s).
    frequency
        Frequencies at which errors are judged [rad/s], rising, shape (F,).
    half
        Half the width of their cells in u, shape (F,).
    start
        H about the middle of the box at `frequency`.
    groups
        Of the variables with those of frequency appended.
    """

    parts: Parts
    target: TransferFunction
    frequency: Real
    half: Real
    start: Expansion
    groups: tuple[Index, ...]

    @classmethod
    def of(cls, parts: Parts, target: TransferFunction, frequency: Real) -> Cover:
        """That of `parts` with its cells about `frequency` (F,) [rad/s]."""
        s = np.asarray(1j * frequency, dtype=np.complex128)
        step = at_once(parts.with_frequency.size**2)
        chunks = [_expanded(parts, s[k : k + step]) for k in range(0, s.size, step)]
        start = Expansion(
            *(
                np.concatenate([getattr(chunk, name) for chunk in chunks])
                for name in ("response", "denominator", "numerator")
            )
        )
        u = np.log(frequency)
        ends = np.concatenate([u[:1], (u[1:] + u[:-1]) / 2, u[-1:]])
        half = np.maximum(u - ends[:-1], ends[1:] - u)
        return cls(parts, target, frequency, half, start, independent_groups(start))

    @cached_property
    def terms(self) -> _Terms:
        """Of the cells about `frequency`."""
        return self._terms(self.start, self.frequency, self.half)

    def bound(
        self, totals: Real, directions: Complex, *, reached: float, board: Real, work: int
    ) -> float:
        """No board has a larger error at any frequency from the first to the last; inf where the
        target vanishes at one.

        Parameters
        ----------
        totals
            What no board passes at each frequency in each direction, shape (2, F).
        directions
            The two c of the error, shape (2,).
        reached, board
            The largest error known, and the multiples (V,) that reach it.
        work
            In entries of arrays.
        """
        if any(
            abs(zero.real) <= ON_THE_AXIS * abs(zero)
            and self.frequency[0] <= abs(zero) <= self.frequency[-1]
            for zero in self.target.zeros
        ):
            return math.inf
        u, half = np.log(self.frequency), self.half
        heap: list[tuple[float, int, float, float, bool]] = []
        for sign, c in enumerate(directions):
            slope = self.terms.slope(np.full(u.size, c))
            bounds = totals[sign] + half * slope
            bounds = np.where(np.isnan(bounds), np.inf, bounds)
            own = zip((-bounds).tolist(), u.tolist(), half.tolist(), strict=True)
            heap += [(above, sign, place, eta, above > -math.inf) for above, place, eta in own]
        heapq.heapify(heap)
        while -heap[0][0] > (goal := GOAL * reached) and work > 0:
            cells: list[tuple[float, int, float, float]] = []
            while heap and len(cells) < 2 * CELLS and -heap[0][0] > goal:
                above, sign, middle, eta, whole = heapq.heappop(heap)
                if whole:
                    halves = (middle - eta / 2, middle + eta / 2)
                    cells += [(-above, sign, place, eta / 2) for place in halves]
                else:
                    cells.append((-above, sign, middle, eta))
            found, took, known = self._cells(cells, directions, board)
            work, reached = work - took, max(reached, known)
            for (above, sign, middle, eta), own in zip(cells, found.tolist(), strict=True):
                heapq.heappush(heap, (-min(above, own), sign, middle, eta, True))
        return -heap[0][0]

    def _cells(
        self, cells: list[tuple[float, int, float, float]], directions: Complex, board: Real
    ) -> tuple[Real, int, float]:
        """Bounds of some cells, the work they took, and the largest error of `board` and of the
        corners of first order in the middle of them."""
        sign = np.array([cell[1] for cell in cells])
        omega = np.exp([cell[2] for cell in cells])
        eta = np.array([cell[3] for cell in cells])
        c = directions[sign]
        expansion = _expanded(self.parts, np.asarray(1j * omega, dtype=np.complex128))
        target = self.target.response(omega / (2 * np.pi))
        with np.errstate(all="ignore"):
            centre = (c * np.log(expansion.response / target)).real
        slope = self._terms(expansion, omega, eta).slope(c)
        gentle = np.isfinite(slope)
        tau = np.where(gentle[:, None], self._tolerance(0 * eta), self._tolerance(eta))
        bound = centre + np.where(gentle, eta * slope, self._target_moves(omega, eta, c))
        work = CELL_WORK * len(cells)
        for group in self.groups:
            own = np.zeros_like(tau)
            own[:, group] = tau[:, group]
            weak = max(group.size - STRONG, 0)
            entries = max(group.size**3, 2 ** min(STRONG, group.size) * (4 + weak * weak))
            step = at_once(entries)
            for k in range(0, len(cells), step):
                kept = slice(k, k + step)
                part = Expansion(
                    expansion.response[kept],
                    expansion.denominator[kept],
                    expansion.numerator[kept],
                )
                bound[kept] += enclose(part, part.response, c[kept], own[kept], strong=STRONG).bound
            work += entries * len(cells)
        low, high = self.parts.box
        own = np.diagonal(expansion.numerator - expansion.denominator, axis1=1, axis2=2)
        corners = np.where((c[:, None] * own[:, : low.size]).real > 0, high, low)
        tried = np.vstack([corners, np.tile(board, (len(cells), 1))])
        with np.errstate(all="ignore"):
            response = self.parts.response(np.tile(1j * omega, 2), tried)
            error = np.nan_to_num((np.tile(c, 2) * np.log(response / np.tile(target, 2))).real)
        return np.where(np.isnan(bound), np.inf, bound), work, float(error.max())

    def _tolerance(self, eta: Real) -> Real:
        """Largest |D_j| in cells of half-width `eta` (N,), shape (N, variables)."""
        low, high = self.parts.box
        moves = self.parts.with_frequency
        tau = np.zeros(moves.size)
        tau[: low.size] = (high - low) / (high + low)
        return np.where(moves, (1 + tau) * np.exp(eta)[:, None] - 1, tau)

    def _terms(self, found: Expansion, omega: Real, eta: Real) -> _Terms:
        """The slope of ln(H/T) along u in some cells, term by term."""
        moves = self.parts.with_frequency
        tau, still = self._tolerance(eta), self._tolerance(0 * eta)
        least = still + np.where(moves, eta[:, None], 0.0)
        first, second, third = self._target_slopes(omega, eta)
        with np.errstate(all="ignore"):
            own, rest = -first, eta**2 / 2 * third
            gains = np.zeros((eta.size, moves.size), complex)
            for sign, matrix in ((1, found.numerator), (-1, found.denominator)):
                diagonal = np.diagonal(matrix, axis1=1, axis2=2)
                own = own + sign * diagonal[:, moves].sum(axis=1)
                gain = -np.einsum("ncj,njc->nj", matrix[:, moves], matrix[:, :, moves])
                gain = gain + np.where(moves, diagonal, 0.0)
                gains = gains + sign * gain
                rest = rest + ((tau - least) * np.abs(gain)).sum(axis=1)
                rest = rest + _remainder(np.abs(matrix), tau, moves)
            along = gains[:, moves].sum(axis=1) - second
        return _Terms(own, np.asarray(gains * still, dtype=np.complex128), eta * along, rest)

    def _target_slopes(self, omega: Real, eta: Real) -> tuple[Complex, Complex, Real]:
        """(ln T)' and (ln T)'' in the middle, |(ln T)'''| at most in the cell; shapes (N,)."""
        s = 1j * omega
        first, second = np.zeros(s.shape, complex), np.zeros(s.shape, complex)
        third = np.zeros(s.shape)
        for sign, roots in ((1, self.target.zeros), (-1, self.target.poles)):
            for root in roots:
                away = s - root
                first += sign * s / away
                second -= sign * s * root / away**2
                near = np.maximum(np.abs(away) - omega * np.expm1(eta), 0.0)
                far = omega * np.exp(eta)
                with np.errstate(divide="ignore"):
                    third += far * abs(root) * (far + abs(root)) / near**3
        return first, second, third

    def _target_moves(self, omega: Real, eta: Real, direction: Complex) -> Real:
        """How far Re c ln T moves in the cell at most, shape (N,)."""
        first, second, third = self._target_slopes(omega, eta)
        with np.errstate(all="ignore"):
            moved = np.abs((direction * first).real) * eta
            moved += np.abs((direction * second).real) * eta**2 / 2 + third * eta**3 / 6
        return np.asarray(np.where(np.isnan(moved), np.inf, moved))


@dataclass(frozen=True, eq=False)
class _Terms:
    """(ln(H/T))' in the middle of N cells (N,), what it moves by with each part (N, variables) and
    with frequency (N,), and beyond that at most (N,), inf where the series may diverge."""

    own: Complex
    parts: Complex
    along: Complex
    rest: Real

    def slope(self, direction: Complex) -> Real:
        """The largest slope of the error anywhere in a cell, shape (N,)."""
        with np.errstate(all="ignore"):
            slope = np.abs((direction * self.own).real) + np.abs((direction * self.along).real)
            slope += np.abs((direction[:, None] * self.parts).real).sum(axis=1) + self.rest
        return np.asarray(np.where(np.isnan(slope), np.inf, slope))


def _expanded(parts: Parts, s: Complex) -> Expansion:
    """About the middle of the box."""
    low, high = parts.box
    return parts.expand(s, np.tile((low + high) / 2, (s.size, 1)), frequency=True)


def _remainder(x: Real, tau: Real, moves: NDArray[np.bool_]) -> Real:
    """sum over W of (1 + D_w) R_ww less its terms up to first order, at most; shape (N,)."""
    z = x * tau[:, None, :]
    hopeless = ~(z.sum(axis=2).max(axis=1) <= HOPELESS)
    z = np.where(hopeless[:, None, None], 0.0, z)
    inverse = np.linalg.inv(np.eye(x.shape[1]) - z)
    diverges = hopeless | ~(inverse.sum(axis=2) > 0).all(axis=1)
    once = np.einsum("nij,nji->ni", z @ inverse, x)
    twice = np.einsum("nij,nji->ni", z @ z @ inverse, x)
    rest = ((twice + tau * once)[:, moves]).sum(axis=1)
    return np.where(diverges, math.inf, rest)
