"""Bounds of an error by the corners of a box, which need no series to converge.

Numerator n and denominator d are multi-affine, so at every board (n, d) is one convex combination
of their values at the corners of the box (Zadeh and Desoer 1963, "Linear System Theory", from
memory).  For any angle p at which all Re(d e^-jp) are positive, |n|/|d| <= |n|/Re(d e^-jp), a
convex function over a linear one, so at most its largest value at a corner; the best of some
angles is taken.  The phase of n and of d is extreme at corners as long as a half-plane holds them
all; `synth.worstcase.phases` bounds them together.  A sharp resonance that sweeps past is bounded
at once so.

Only the parts that move n and d most, the strong ones, are gone through: 2^K corners.  At each the
others, the weak ones, move within their whole range.  What eliminating the strong parts leaves of
X is L, and d = d_v det(I + L E) with E the diagonal of their deviations, within +-1.  The linear
part of that is taken as it is, jointly for n and d; the second order is at most the sum of the
principal minors of L, and what is beyond at most prod(1 + r_i) less its own first three terms,
r_i the norm of row i (Hadamard 1893: a determinant is at most the product of the norms of its
rows).  Scaling L by a diagonal similarity, which leaves minors as they are, keeps the r_i small.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.worstcase.phases import Phases, together

__all__ = ["Corners", "Range", "magnitude", "phase"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Angles tried for the half-plane that holds the denominator, as shares of the range that may hold
# any, how they are refined, and what an angle scores that holds none.
ANGLES = np.linspace(-0.48, 0.48, 17)
REFINED = np.array([-0.67, -0.33, 0.33, 0.67])
REFINEMENTS = (0.06, 0.02)
NONE = 1e100

# Rounds in which rows and columns of L are brought to the same size.
BALANCING = 2

# Entries above this in the middle of the elimination spoil what comes after: no bound there.
LARGEST_ENTRY = 1e4

# What rounding may change a value by, against the largest at any corner: far above that of an
# elimination of some twenty parts with entries up to the largest.
ROUNDING = 1e-10

# Share of a bound of phase above its worst corner from which numerator and denominator are looked
# at together.
TOGETHER = 0.01

# Where the weak parts move a number by more than this share, its size is bounded more plainly.
MOVED = 0.5


@dataclass(frozen=True, eq=False)
class Corners:
    """A determinant det(I + A diag(e)) at the corners of the strong parts.

    Parameters
    ----------
    value
        With all weak parts in the middle, shape (N, M), M = 2^K; part k is at its upper end where
        bit k of the number of a corner is set.
    linear
        What it changes by with each weak part at its end, shape (W, N, M).
    rest
        What it changes by beyond that at most, shape (N, M).
    """

    value: Complex
    linear: Complex
    rest: Real

    @classmethod
    def of(cls, a: Complex, strong: int) -> Corners:
        """Those of A, shape (N, V, V), its first `strong` parts strong."""
        value, left = _eliminated(_balanced(a), strong)
        size = np.abs(value)
        spare = ROUNDING * size.max(axis=1, keepdims=True)
        first = np.moveaxis(np.diagonal(left), -1, 0)
        return cls(value, value * first, size * _beyond(left, first) + spare)

    def or_else(self, other: Corners, where: NDArray[np.bool_]) -> Corners:
        """The `other` for the boxes `where` (N,) is true."""
        pick = where[:, None]
        return Corners(
            np.where(pick, other.value, self.value),
            np.where(pick, other.linear, self.linear),
            np.where(pick, other.rest, self.rest),
        )


@dataclass(frozen=True, eq=False)
class Range:
    """How far an error may rise over a box from its value in the middle.

    Parameters
    ----------
    up
        No board rises more, shape (N,); inf where no half-plane was found.
    around
        For the phase, no board moves more either way, shape (N,).
    weak
        The part of `up` that comes of weak parts, shape (N,).
    best
        What the worst corner of the strong parts rises by, the weak ones in the middle, (N,).
    corner
        The end +-1 each part takes there, 0 for the middle, shape (N, V).
    turns
        How far the error turns round with each part: it rises that much from the lower to the
        upper end with the others at some corner, and falls that much at another; shape (N, V).
    """

    up: Real
    around: Real
    weak: Real
    best: Real
    corner: Real
    turns: Real


def magnitude(over: Corners, under: Corners, parts: int) -> Range:
    """Of ln |over/under|, `parts` in all."""
    size = np.abs(over.value)
    turn = np.exp(-1j * _best_angle(size, under))[:, None]
    along = (under.value * turn).real
    ratio = (size / along).max(axis=1)
    steps = (under.linear * turn).real
    least = along - np.abs(steps).sum(axis=0) - under.rest
    # |1 + x| <= 1 + Re x + (Im x)^2 / (2 (1 + Re x)).
    unit = over.linear / over.value
    back, across = np.abs(unit.real).sum(axis=0), np.abs(unit.imag).sum(axis=0)
    gentle = back < MOVED
    bent = np.where(gentle, across**2 / (2 * (1 - back)), 0.0) * size
    pull = np.where(gentle, unit.real * size, 0.0)
    plain = np.where(gentle, 0.0, np.abs(over.linear).sum(axis=0))
    most = size + bent + plain + over.rest
    moved = np.abs(pull - ratio[:, None] * steps).sum(axis=0)
    excess = most - ratio[:, None] * (along - under.rest) + moved
    valid = (least > 0).all(axis=1)
    above = np.maximum((excess / least).max(axis=1), 0.0)
    up = np.where(valid, np.log(ratio + above), np.inf)
    up = np.where(np.isnan(up), np.inf, up)
    change = np.log(size / np.abs(under.value))
    weak = np.where(valid, up - np.log(ratio), np.inf)
    return Range(up, np.full(up.shape, np.inf), weak, *_worst(change, parts))


def phase(over: Corners, under: Corners, parts: int) -> Range:
    """Of arg(over/under), `parts` in all."""
    ahead, behind = Phases.of(over), Phases.of(under)
    held = ahead.held & behind.held
    change = np.where(held[:, None], ahead.angle - behind.angle, -np.inf)
    up, down = ahead.high - behind.low, behind.high - ahead.low
    best, corner, turns = _worst(change, parts)
    for k in np.flatnonzero(held & (up > best + TOGETHER * np.abs(up))):
        up[k] = min(up[k], together(over, under, ahead, behind, int(k)))
    # With the weak parts in their middle, n and d each by itself.
    alone = ahead.angle.max(axis=1) - behind.angle.min(axis=1)
    weak = np.where(held, np.maximum(ahead.high - behind.low - alone, 0.0), np.inf)
    around = np.where(held, np.maximum(up, down), np.inf)
    return Range(np.where(held, up, np.inf), around, weak, best, corner, turns)


def _worst(change: Real, parts: int) -> tuple[Real, Real, Real]:
    """The largest change at a corner, the ends there, and how far it turns round."""
    change = np.where(np.isfinite(change), change, -np.inf)
    worst = np.argmax(change, axis=1)
    count, strong = change.shape[0], change.shape[1].bit_length() - 1
    ends, turns = np.zeros((count, parts)), np.zeros((count, parts))
    ends[:, :strong] = 2.0 * (worst[:, None] >> np.arange(strong) & 1) - 1
    for k in range(strong):
        halves = change.reshape(count, -1, 2, 2**k)
        rise = np.nan_to_num(halves[:, :, 1] - halves[:, :, 0], posinf=0.0, neginf=0.0)
        turns[:, k] = np.minimum(rise.max(axis=(1, 2)), -rise.min(axis=(1, 2)))
    return change.max(axis=1), ends, np.maximum(turns, 0.0)


def _best_angle(size: Real, under: Corners) -> Real:
    """The angle p with the least of the largest size/Re(under e^-jp), weak parts included, (N,)."""
    values = [np.ascontiguousarray(part) for part in (under.value.real, under.value.imag)]
    steps = [np.ascontiguousarray(part) for part in (under.linear.real, under.linear.imag)]

    def tried(angle: Real) -> Real:
        cos, sin = np.cos(angle)[:, None], np.sin(angle)[:, None]
        least = cos * values[0] + sin * values[1] - under.rest
        for real, imag in zip(*steps, strict=True):
            least -= np.abs(cos * real + sin * imag)
        missing = NONE * (1 - least.min(axis=1))
        score = np.where(missing < NONE, (size / least).max(axis=1), missing)
        return np.asarray(np.where(np.isnan(score), np.inf, score))

    # An angle that suits every corner lies within a quarter turn of each.
    turned = np.angle(under.value)
    low, high = turned.max(axis=1) - np.pi / 2, turned.min(axis=1) + np.pi / 2
    best, lowest = (low + high) / 2, np.full(size.shape[0], np.inf)
    for offsets in (ANGLES, *(REFINED * step for step in REFINEMENTS)):
        about = best.copy()
        for offset in offsets:
            angle = about + offset * (high - low)
            score = tried(angle)
            best = np.where(score < lowest, angle, best)
            lowest = np.minimum(lowest, score)
    return np.asarray(best)


def _balanced(a: Complex) -> Complex:
    """A with rows and columns of like size, by a diagonal similarity."""
    size = np.abs(a)
    size = np.where(np.eye(a.shape[1], dtype=bool), 0.0, size)
    scale = np.ones(a.shape[:2])
    for _ in range(BALANCING):
        scaled = size * scale[:, None, :] / scale[:, :, None]
        rows, columns = np.sqrt((scaled**2).sum(axis=2)), np.sqrt((scaled**2).sum(axis=1))
        usual = (rows > 0) & (columns > 0)
        scale *= np.sqrt(np.where(usual, rows, 1.0) / np.where(usual, columns, 1.0))
    return np.asarray(a * scale[:, None, :] / scale[:, :, None])


def _eliminated(a: Complex, strong: int) -> tuple[Complex, Complex]:
    """det(I + A diag(e)) at all e of -1 and 1 of the strong parts, the others 0, shape (N, 2^K),
    and L, (W, W, N, 2^K): one part after the other, what is left of A after eliminating part 0
    has the same form, A_ij - A_i0 e A_0j / (1 + A_00 e)."""
    count = a.shape[0]
    values = np.ones((count, 1), dtype=complex)
    left = np.ascontiguousarray(np.moveaxis(a, 0, -1))[..., None]
    ends = np.array([-1.0, 1.0])[:, None]
    for _ in range(strong):
        spoilt = ~(np.abs(left).max(axis=(0, 1)) <= LARGEST_ENTRY)
        values = np.where(spoilt, np.nan, values)
        pivot = 1 + left[0, 0, :, None, :] * ends
        scaled = left[1:, 0, :, None, :] * (ends / pivot)
        rest = scaled[:, None] * left[0, 1:, :, None, :]
        rest = np.subtract(left[1:, 1:, :, None, :], rest, out=rest)
        values = (values[:, None, :] * pivot).reshape(count, -1)
        left = rest.reshape(*rest.shape[:2], *values.shape)
    return values, left


def _beyond(left: Complex, first: Complex) -> Real:
    """What det(I + L E) is beyond its linear part at most, shape (N, M)."""
    second, one, two, more = (np.zeros(left.shape[2:]) for _ in range(4))
    for i in range(left.shape[0]):
        for j in range(i):
            second += np.abs(first[i] * first[j] - left[i, j] * left[j, i])
        row = np.sqrt((left[i].real ** 2 + left[i].imag ** 2).sum(axis=0))
        more += row * (more + two)
        two += row * one
        one += row
    return second + more
