"""Bounds of an error over a whole box of parts, valid for every board in it.

The error is Re(c ln(H/T)); c = 1, -1 for the magnitude up and down [Np], -j, j for the phase
[rad].  A box is centred on a board, delta_k within +-tau_k, and ln H is the series of
`synth.worstcase.expansion`:

- The first and second order are taken as they are, Q(e) = g.e + e.B e/2 with e = delta/tau
  within +-1.  About the corner v that first order prefers, e_k = v_k (1 - c_k), c_k within 0..2,
  and Q <= Q(v) + sum of 2 max(0, v_k (-g_k - (B v)_k) + sum_j max(0, v_j v_k B_jk)): no more
  than Q(v) wherever no part gains by leaving the corner.
- The third order is at most a third of sum_k G_k, G_k = sum_ij |T_kij|, T the trace terms of
  numerator less denominator, so that what both share falls out first.
- Order n of ln det(I + X Delta) is at most trace(Z^n)/n with Z = |X| diag(tau), since every
  product in the trace is; the orders from N on sum to at most trace(Z^N (I - Z)^-1)/N.  The
  series converges when the spectral radius of Z is below 1, which holds when u = (I - Z)^-1 1
  is positive, for then Z u < u (Collatz 1942, Wielandt 1950, from memory).  Then neither H nor
  1/H is 0 in the box.

The slope along part k, times tau_k, is g_k within sum_j |B_kj| + G_k + [Z^4 (I - Z)^-1]_kk, of
numerator and denominator: beyond that the error has its extreme at an end of this part,
whatever the others are.

Beside that stand the corners of the box (`synth.worstcase.corners`): a sharp resonance that sweeps
past, where no series converges, is bounded by them.

The bounds hold up to rounding, for which `ROUNDING` is added.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.worstcase import corners
from synth.worstcase.expansion import Expansion

__all__ = ["Enclosure", "enclose"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Far above the rounding of a solve of some twenty unknowns, far below what anyone reads.
ROUNDING = 1e-9

# What a part adds to the doubt for its mere effect, where the error does not turn round with it.
UNTURNED = 1e-3

# Sum of a row of Z above which its inverse is not even looked at.
HOPELESS = 1e3


@dataclass(frozen=True, eq=False)
class Enclosure:
    """What is known of N boxes.

    Parameters
    ----------
    centre
        Error of the board in the centre, shape (N,).
    bound
        No board of the box has a larger error, shape (N,); inf where the series may diverge.
    slope
        +1 or -1 where the error rises or falls with a part over the whole box, else 0,
        shape (N, V).
    best
        Error of the worst corner, shape (N,); -inf where corners were not gone through.
    corner
        The end each part takes there, +-1, or 0 for the middle, shape (N, V).
    doubt
        What each part adds to the distance between the bound and the corner, shape (N, V).
    weak
        The part of the bound that more strong parts may take away, shape (N,).
    """

    centre: Real
    bound: Real
    best: Real
    slope: Real
    corner: Real
    doubt: Real
    weak: Real


def enclose(
    expansion: Expansion,
    target: Complex,
    direction: Complex,
    tau: Real,
    *,
    cubic: bool = True,
    strong: int = 0,
) -> Enclosure:
    """Enclose the error over boxes about the boards of `expansion`.

    Parameters
    ----------
    target, direction
        T and c, shape (N,).
    tau
        Half the width of the box relative to its centre, shape (N, V).
    cubic
        Whether the third order is taken by itself; without, it is part of the tail: quicker,
        wider.
    strong
        Of how many parts at most all corners are gone through; none without.
    """
    with np.errstate(all="ignore"):
        centre = (direction * np.log(expansion.response / target)).real
        return _enclosed(expansion, centre, direction, tau, cubic=cubic, strong=strong)


def _enclosed(
    expansion: Expansion, centre: Real, direction: Complex, tau: Real, *, cubic: bool, strong: int
) -> Enclosure:
    effect = np.abs(_diagonal(expansion.denominator)) + np.abs(_diagonal(expansion.numerator))
    effect = np.where(tau > 0, np.nan_to_num(effect * tau, nan=1.0), -1.0)
    order = np.argsort(-effect, axis=1, kind="stable")
    # Parts at a fixed value take no part in the arithmetic.
    order = order[:, : max(1, int((tau > 0).sum(axis=1).max()))]
    width = np.take_along_axis(tau, order, axis=1)
    x = _picked(expansion.denominator, order) * width[:, None, :]
    y = _picked(expansion.numerator, order) * width[:, None, :]
    c = direction[:, None, None]
    first = (direction[:, None] * (_diagonal(y) - _diagonal(x))).real
    second = (c * (x * x.swapaxes(1, 2) - y * y.swapaxes(1, 2))).real
    corner = _corner(first, second)
    best, leaving = _quadratic(first, second, corner)
    third = _third(x, y, direction) if cubic else np.zeros_like(first)
    tail, diverges = _tail(np.abs(x), np.abs(y), 4 if cubic else 3)
    rest = third.sum(axis=1) / 3 + tail.sum(axis=1) / (4 if cubic else 3)
    spread = np.abs(first).sum(axis=1) + np.abs(second).sum(axis=(1, 2)) / 2
    series = np.minimum(best + leaving.sum(axis=1), spread) + rest
    series = np.where(diverges | np.isnan(series), np.inf, series)
    spread = np.where(diverges | np.isnan(spread), np.inf, spread + rest)
    reached, weak = np.full(centre.shape, -np.inf), np.zeros(centre.shape)
    by_corners, turns = diverges, np.zeros_like(width)
    effect = np.take_along_axis(effect, order, axis=1)
    if strong:
        found = _by_corners(x, y, direction, min(strong, width.shape[1]))
        weak = np.where(found.up < series, found.weak, 0.0)
        weak = np.where(np.isinf(series) & np.isinf(found.up), np.inf, weak)
        by_corners = diverges | (found.up < series)
        series, spread = np.minimum(series, found.up), np.minimum(spread, found.around)
        reached, corner, turns = found.best, found.corner, found.turns
    bound = centre + series
    # The phase counts modulo a turn: a box that may reach beyond half a turn is not bounded.
    wraps = (direction.imag != 0) & ~(np.abs(centre) + spread <= np.pi)
    bound = np.where(wraps | np.isnan(bound), np.inf, bound)
    unsure = np.abs(second).sum(axis=2) + third + tail
    slope = np.where((np.abs(first) > unsure) & ~diverges[:, None], np.sign(first), 0.0)
    doubt = np.where(by_corners[:, None], turns + UNTURNED * effect, leaving + third / 3 + tail / 4)
    doubt = np.where(width > 0, np.nan_to_num(doubt, nan=1.0, posinf=1e300), -1.0)
    bound += ROUNDING * (1 + np.abs(bound))

    def spread_out(own: Real, fixed: float) -> Real:
        into = np.full_like(tau, fixed)
        np.put_along_axis(into, order, own, axis=1)
        return into

    return Enclosure(
        centre=centre,
        bound=bound,
        best=centre + reached,
        slope=spread_out(slope, 0.0),
        corner=spread_out(corner, 0.0),
        doubt=spread_out(doubt, -1.0),
        weak=weak,
    )


def _picked(matrix: Complex, order: NDArray[np.intp]) -> Complex:
    each = np.arange(matrix.shape[0])[:, None, None]
    return np.asarray(matrix[each, order[:, :, None], order[:, None, :]])


def _diagonal(matrix: Complex) -> Complex:
    return np.asarray(np.diagonal(matrix, axis1=1, axis2=2))


def _corner(first: Real, second: Real) -> Real:
    """The corner of first order, improved by the slopes of second order there."""
    corner = np.where(first < 0, -1.0, 1.0)
    for _ in range(2):
        slope = first + np.einsum("nij,nj->ni", second, corner)
        corner = np.where(slope < 0, -1.0, 1.0)
    return corner


def _quadratic(first: Real, second: Real, corner: Real) -> tuple[Real, Real]:
    """Q at the corner, shape (N,), and what each part may gain by leaving it, (N, V)."""
    bent = np.einsum("nij,nj->ni", second, corner)
    at = ((first + bent / 2) * corner).sum(axis=1)
    turned = corner[:, :, None] * second * corner[:, None, :]
    gain = np.maximum(turned, 0.0).sum(axis=2) - corner * (first + bent)
    return at, 2 * np.maximum(gain, 0.0)


def _third(x: Complex, y: Complex, direction: Complex) -> Real:
    """G of the module, shape (N, V)."""
    c = direction[:, None, None, None]

    def loops(a: Complex) -> Complex:
        # a_ki a_ij a_jk
        return a[:, :, :, None] * (a[:, None, :, :] * a.swapaxes(1, 2)[:, :, None, :])

    terms = (c * (loops(y) - loops(x))).real
    return np.asarray(np.abs(terms + terms.swapaxes(2, 3)).sum(axis=(2, 3)) / 2)


def _tail(x: Real, y: Real, power: int) -> tuple[Real, NDArray[np.bool_]]:
    """Diagonal of Z^power (I - Z)^-1, of both summed, shape (N, V), and where one diverges."""
    total = np.zeros(x.shape[:2])
    diverges = np.zeros(x.shape[0], dtype=bool)
    identity = np.eye(x.shape[1])
    for found in (x, y):
        # Far from converging, and I - Z may be badly scaled.
        hopeless = ~(found.sum(axis=2).max(axis=1) <= HOPELESS)
        z = np.where(hopeless[:, None, None], 0.0, found)
        inverse = np.linalg.inv(identity - z)
        diverges |= hopeless | ~(inverse.sum(axis=2) > 0).all(axis=1)
        squared = z @ z
        powered = squared @ (squared if power == 4 else z)
        total += np.maximum(np.einsum("nij,nji->ni", powered, inverse), 0.0)
    return np.where(diverges[:, None], np.inf, total), diverges


def _by_corners(x: Complex, y: Complex, direction: Complex, strong: int) -> corners.Range:
    """By the corners of the `strong` parts that stand first, errors from the centre."""
    d, n = corners.Corners.of(x, strong), corners.Corners.of(y, strong)
    parts = x.shape[1]
    # Re(c z) is -Im(c) Im(z) for an imaginary c.
    turns, falls = direction.imag != 0, direction.real - direction.imag < 0
    over, under = n.or_else(d, falls), d.or_else(n, falls)
    return (corners.phase if turns.all() else corners.magnitude)(over, under, parts)
