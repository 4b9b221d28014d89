"""Boards on which numerator or denominator vanishes at a frequency: proof that an error has no
limit.

With d = det(I + X E) of a whole box, E the diagonal of deviations e_k within +-1, two parts that
move over a rectangle while all others stay take d along a straight line on each of its sides, for
d is affine in each part.  Where that closed chain of four lines winds about 0, d vanishes on the
rectangle, for else it could be drawn together to a point without crossing 0.  If no half-plane
bounded by 0 misses a corner of n there, |n/d| has no largest value: a pole reaches the imaginary
axis within tolerance.  The same with n and d exchanged is a zero that reaches it.  Near such a
board H takes every phase as well.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from synth.worstcase.boxes import Start

__all__ = ["Vanishing", "find_vanishing"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Values = Callable[[Real], Complex]

# Frequencies looked at, those where the linear part reaches 0 most easily.
TRIED = 6

# Directions in which the reach of the linear part is measured, and how short of 0 it may fall.
DIRECTIONS = np.exp(-1j * np.linspace(0, np.pi, 24, endpoint=False))
SHORT = 0.2

# Newton's steps at most, how far from the ends of their range they keep the parts, and the value
# against that in the middle of the box that counts as 0.
STEPS = 40
INSIDE = (0.9, 0.995)
ZERO = 1e-9

# Rectangles tried: pairs of parts, and shares of the room around the board.
PAIRS = 6
SHARES = (1.0, 0.3, 0.1, 0.03)

# Least distance of 0 from the sides of the chain, against its size, and least size against the
# middle of the box: far above rounding.
CLEAR = 1e-3
SMALLEST = 1e-6

# How near to the board that vanishes the one of opposite phase is looked for.
NEAR = (1e-2, 1e-3)


@dataclass(frozen=True, eq=False)
class Vanishing:
    """A proof.

    Parameters
    ----------
    what
        ``"pole"`` or ``"zero"``.
    place
        Number of the frequency.
    parts
        Numbers of the two variables that move over the rectangle.
    board
        A board nearest to where it vanishes, (V,), as multiples.
    opposite
        One of a phase error of half a turn, (V,), or None where none was found.
    """

    what: str
    place: int
    parts: tuple[int, int]
    board: Real
    opposite: Real | None


def find_vanishing(start: Start, target: Complex, suspects: Sequence[int] = ()) -> Vanishing | None:
    """A proof that numerator or denominator vanishes on some board; None where none was found,
    which proves nothing.  `target` (F,) as the error is taken against, `suspects` frequencies to
    look at beside the likeliest."""
    low, high = start.box
    tau = (high - low) / (high + low)
    own = start.expansion
    for what, matrix, other in (
        ("pole", own.denominator, own.numerator),
        ("zero", own.numerator, own.denominator),
    ):
        for place in dict.fromkeys([*suspects, *_likely(matrix, tau)]):
            a, b = matrix[place] * tau, other[place] * tau
            board = _root(partial(_values, a), np.zeros(tau.size))
            pair = None if board is None else _rectangle(a, b, board)
            if board is None or pair is None:
                continue
            ratio = own.response[place] / target[place]
            factor = 1 / ratio if what == "zero" else ratio
            opposite = _opposite(a, b, factor / abs(factor), board)
            middle = (low + high) / 2
            return Vanishing(
                what,
                place,
                pair,
                middle * (1 + tau * board),
                None if opposite is None else middle * (1 + tau * opposite),
            )
    return None


def _likely(matrix: Complex, tau: Real) -> list[int]:
    """Places where 1 + sum of A_kk e_k reaches 0, or nearly, the likeliest first."""
    slope = np.nan_to_num(np.diagonal(matrix, axis1=1, axis2=2) * tau)
    reach = np.stack([np.abs((slope * turn).real).sum(axis=1) for turn in DIRECTIONS])
    spare = (reach - np.abs(DIRECTIONS.real)[:, None]).min(axis=0)
    order = np.argsort(-spare, kind="stable")[:TRIED]
    return [int(k) for k in order if spare[k] > -SHORT]


def _values(a: Complex, e: Real) -> Complex:
    """det(I + A diag(e)) of boards e, shape (..., V)."""
    return np.asarray(np.linalg.det(np.eye(a.shape[0]) + a * e[..., None, :]))


def _slopes(values: Values, e: Real) -> tuple[complex, Complex]:
    """Value at e and slope along each part, exact for what is affine in each."""
    boards = np.tile(e, (2 * e.size + 1, 1))
    each = np.arange(e.size)
    boards[each, each], boards[e.size + each, each] = 1.0, -1.0
    found = values(boards)
    return complex(found[-1]), (found[: e.size] - found[e.size : -1]) / 2


def _root(values: Values, start: Real) -> Real | None:
    """A board on which `values` is 0, off the ends of the box where one is found there."""
    found = (_newton(values, start, inside) for inside in INSIDE)
    return next((board for board in found if board is not None), None)


def _newton(values: Values, start: Real, inside: float) -> Real | None:
    """By Newton's steps of least size within `inside` of the box."""
    e = np.clip(start, -inside, inside)
    for _ in range(STEPS):
        value, slope = _slopes(values, e)
        if not (np.isfinite(value) and np.isfinite(slope).all()):
            return None
        if abs(value) < ZERO:
            return e
        free = np.ones(e.size, dtype=bool)
        step = np.zeros(e.size)
        for _ in range(e.size):
            rows = np.stack([slope.real, slope.imag]) * free
            step = np.linalg.lstsq(rows, -np.array([value.real, value.imag]), rcond=None)[0] * free
            out = free & (np.abs(e + step) > inside) & (np.abs(e) >= inside * 0.999)
            if not out.any() or free.sum() <= out.sum():
                break
            free &= ~out
        room = np.where(step > 0, inside - e, inside + e)
        with np.errstate(divide="ignore", invalid="ignore"):
            share = np.where(step != 0, room / np.abs(step), np.inf)
        e = np.clip(e + min(1.0, float(share[free].min(initial=1.0))) * step, -inside, inside)
    return None


def _rectangle(a: Complex, b: Complex, board: Real) -> tuple[int, int] | None:
    """Two parts over whose range about `board` det(I + A E) vanishes and det(I + B E) does not."""
    _, slope = _slopes(partial(_values, a), board)
    room = 1 - np.abs(board)
    area = np.abs((slope[:, None] * slope.conj()).imag) * room[:, None] * room
    order = np.argsort(-np.triu(area), axis=None, kind="stable")[:PAIRS]
    for i, j in zip(*np.unravel_index(order, area.shape), strict=True):
        for share in SHARES:
            corners = np.tile(board, (4, 1))
            corners[:, i] += share * room[i] * np.array([-1, 1, 1, -1])
            corners[:, j] += share * room[j] * np.array([-1, -1, 1, 1])
            if _winds(_values(a, corners)) and _misses(_values(b, corners)):
                return int(i), int(j)
    return None


def _winds(corners: Complex) -> bool:
    """Whether the closed chain of lines through four points winds about 0, clear of it."""
    after = np.roll(corners, -1)
    size = float(np.abs(corners).max())
    distance = np.abs((corners.conj() * after).imag) / np.maximum(np.abs(after - corners), 1e-300)
    turned = float(np.angle(after / corners).sum())
    return bool(size > SMALLEST and distance.min() > CLEAR * size and abs(turned) > np.pi)


def _misses(corners: Complex) -> bool:
    """Whether 0 lies outside the convex hull of the points, clear of it."""
    phase = np.angle(corners / corners.mean())
    span = float(phase.max() - phase.min())
    size = np.abs(corners)
    return bool(size.min() > SMALLEST and span < np.pi * (1 - CLEAR))


def _opposite(a: Complex, b: Complex, factor: complex, board: Real) -> Real | None:
    """A board with A's value small and of opposite phase to `factor` times B's."""
    for near in NEAR:

        def mixed(e: Real, near: float = near) -> Complex:
            return _values(a, e) + near * factor * _values(b, e)

        found = _root(mixed, board)
        if found is not None:
            return found
    return None
