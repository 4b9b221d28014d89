"""A bad board, found by moving one part at a time as far as the error grows.

Along one part ln H = ln(1 + Y_kk delta) - ln(1 + X_kk delta) exactly (see
`synth.worstcase.expansion`), so the slope of Re(c ln H) is 0 where

    Re(c (Y_kk - X_kk) conj((1 + X_kk delta)(1 + Y_kk delta))) = 0,

a quadratic equation: the best value of one part is an end of its range or one of two roots.

Where the error is largest on a ridge, parts have to move together: `follow` takes steps of the
second order, within the box and within a distance that shrinks where a step fails.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.worstcase.expansion import Expansion, Parts

__all__ = ["climb", "follow"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Moves of one part at most, as a multiple of the number of parts.
MOVES = 4

# Steps along a ridge at most, and how far the first may go: a share of the width of the box.
STEPS = 25
FIRST_STEP = 0.25

# Rounds over all parts in which one step is found.
ROUNDS = 6

# Below this reach a ridge is followed no more.
LEAST_REACH = 1e-3

# A move that gains less [Np, rad] ends the climb.
LEAST_GAIN = 1e-9


def climb(
    parts: Parts, s: Complex, target: Complex, direction: Complex, start: Real
) -> tuple[Real, Real]:
    """Climb from boards `start` (N, V), multiples of the nominal admittances, each at its own
    `s` (N,) with its own target and direction c (N,).

    Returns
    -------
    Error Re(c ln(H/T)) of the boards reached, shape (N,), and the boards, (N, V); a phase that
    would pass half a turn stays where it was before.
    """
    low, high = parts.box
    boards = start.copy()
    best, kept = np.full(s.size, -np.inf), start.copy()
    active = np.arange(s.size)
    for _ in range(MOVES * parts.active.size + 1):
        found = parts.expand(s[active], boards[active])
        error = _error(found, target[active], direction[active])
        better = error > best[active]
        best[active[better]], kept[active[better]] = error[better], boards[active[better]]
        gain, move = _moves(found, direction[active], boards[active], low, high)
        part = np.argmax(gain, axis=1)
        each = np.arange(active.size)
        going = better & (gain[each, part] > LEAST_GAIN)
        active, part, each = active[going], part[going], each[going]
        if not active.size:
            break
        boards[active, part] = np.clip(
            boards[active, part] * (1 + move[each, part]), low[part], high[part]
        )
    return best, kept


def follow(
    parts: Parts, s: Complex, target: Complex, direction: Complex, start: Real
) -> tuple[Real, Real]:
    """Follow ridges from boards `start`; arguments and what is returned as those of `climb`."""
    low, high = parts.box
    boards = start.copy()
    found = parts.expand(s, boards)
    error = _error(found, target, direction)
    reach = np.full(s.size, FIRST_STEP)
    for _ in range(STEPS):
        step = _step(found, direction, boards, (low, high), reach)
        tried = np.clip(boards * (1 + step), low, high)
        there = parts.expand(s, tried)
        reached = _error(there, target, direction)
        better = reached > error
        reach = np.where(better, np.minimum(2 * reach, 1.0), reach / 4)
        if not (better & (reached > error + LEAST_GAIN)).any() and reach.max() < LEAST_REACH:
            break
        keep = better[:, None]
        boards, error = np.where(keep, tried, boards), np.where(better, reached, error)
        found = Expansion(
            *(
                np.where(better.reshape(-1, *[1] * (new.ndim - 1)), new, old)
                for new, old in (
                    (there.response, found.response),
                    (there.denominator, found.denominator),
                    (there.numerator, found.numerator),
                )
            )
        )
    return error, boards


def _error(found: Expansion, target: Complex, direction: Complex) -> Real:
    with np.errstate(all="ignore"):
        error = (direction * np.log(found.response / target)).real
    return np.where(np.isfinite(error), error, -np.inf)


def _step(
    found: Expansion, direction: Complex, boards: Real, box: tuple[Real, Real], reach: Real
) -> Real:
    """Relative deviations that gain most to second order, part by part in `ROUNDS`; (N, V)."""
    x, y, c = found.denominator, found.numerator, direction[:, None, None]
    with np.errstate(all="ignore"):
        first = np.diagonal((c * (y - x)).real, axis1=1, axis2=2)
        second = (c * (x * x.swapaxes(1, 2) - y * y.swapaxes(1, 2))).real
    first, second = np.nan_to_num(first), np.nan_to_num(second)
    width = reach[:, None] * (box[1] - box[0]) / boards
    least = np.maximum(box[0] / boards - 1, -width)
    most = np.minimum(box[1] / boards - 1, width)
    step = np.zeros_like(boards)
    for _ in range(ROUNDS):
        for k in range(boards.shape[1]):
            bent = second[:, k, k]
            slope = first[:, k] + np.einsum("nj,nj->n", second[:, k], step) - bent * step[:, k]
            gains = [slope * e[:, k] + bent * e[:, k] ** 2 / 2 for e in (least, most)]
            end = np.where(gains[1] >= gains[0], most[:, k], least[:, k])
            with np.errstate(all="ignore"):
                inner = np.clip(-slope / bent, least[:, k], most[:, k])
            step[:, k] = np.where(bent < 0, inner, end)
    return step


def _moves(
    found: Expansion, direction: Complex, boards: Real, low: Real, high: Real
) -> tuple[Real, Real]:
    """Gain of the best move of each part alone, and that move as a relative deviation; (N, V)."""
    x = np.diagonal(found.denominator, axis1=1, axis2=2)
    y = np.diagonal(found.numerator, axis1=1, axis2=2)
    ends = low / boards - 1, high / boards - 1
    with np.errstate(all="ignore"):
        weight = direction[:, None] * (y - x)
        a2, a1, a0 = (weight * np.conj(x * y)).real, (weight * np.conj(x + y)).real, weight.real
        root = np.sqrt(a1 * a1 - 4 * a2 * a0)
        stable = -(a1 + np.copysign(root, a1)) / 2
        tried = np.stack([*ends, stable / a2, a0 / stable])
        inside = (tried >= ends[0]) & (tried <= ends[1])
        tried = np.where(inside, tried, 0.0)
        change = (direction[:, None] * (np.log1p(y * tried) - np.log1p(x * tried))).real
    change = np.where(np.isfinite(change), change, -np.inf)
    pick = np.argmax(change, axis=0)[None]
    return np.take_along_axis(change, pick, 0)[0], np.take_along_axis(tried, pick, 0)[0]
