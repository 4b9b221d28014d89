"""Closed-loop poles in the right half-plane, counted from the turning of 1 + L.

A polynomial of degree n with Z roots in the right half-plane turns by (n - 2 Z) pi/2 from
w = 0 to infinity, and one with P there and m at the origin by (n - m - 2 P) pi/2 from 0+;
1 + L is the ratio of the closed to the open loop's, so Z = P + m/2 - turn / pi.  A pair of
poles of L at +-j w0 is multiplied away by (s^2 + w0^2) / (s + w0)^2 first.  A delay adds no
poles of its own to an L that falls below 1.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from synth.transfer import TransferFunction

__all__ = [
    "LIKE_TARGET",
    "ROUND",
    "TURN",
    "follows_target",
    "freed_of_axis",
    "is_decidable",
    "settled_turns",
    "turns_due",
    "unstable_poles",
]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Response = Callable[[Real], Complex]

# Between neighbours of the grid 1 + L may turn by this much [rad]; where it turns by more, and
# |L| is large enough to go around -1, points are added until it does not.
TURN = 1.0
ROUND = 0.9
MOST_POINTS = 300_000

# How far the phase of the board may be from that of H(s) at the frequency from which turning is
# counted [rad].
LIKE_TARGET = 0.2


def unstable_poles(
    parts: tuple[TransferFunction, TransferFunction],
    response: Response,
    grid: Real,
    value: Complex,
    *,
    delay: float = 0.0,
    asked: Complex | None = None,
    excess: int = 0,
) -> int | None:
    """How many closed-loop poles lie in the right half-plane; None where that is not decided.

    A pole at the origin that a zero cancels stays in the closed loop, never decays, and counts.

    Parameters
    ----------
    parts
        The plant and H(s), whose poles are those of L.
    response, grid, value
        L over frequency, frequencies [Hz] far beyond every root, and L there.
    delay
        Of the plant [s].
    asked
        L with H(s) itself on the grid, where `response` has a board instead.  The finite gain
        of op-amps turns a pole at the origin into one close to it; below the frequency from
        which the board is like H(s) nothing is counted.
    excess
        How many poles the board has right of the axis beyond those of H(s).
    """
    if asked is not None:
        if not is_decidable(parts[1]):
            return None
        alike = np.flatnonzero(follows_target(value, asked, parts[1]))
        start = int(alike[0]) if alike.size and parts[1].poles_at_origin else 0
        grid, value = grid[start:], value[start:]
    elif delay and sum(tf.relative_degree for tf in parts) <= 0 and abs(value[-1]) >= 1:
        return None
    settled = settled_turns(response, grid, value, parts)
    if settled is None:
        return None
    return round(turns_due(parts) + excess - float(np.sum(settled[2])) / math.pi)


def follows_target(value: Complex, asked: Complex, target: TransferFunction) -> NDArray[np.bool_]:
    """Where L of a board turns as that of H(s) = `target` does.

    A pole at the origin that finite gain has moved shows in the phase, a quarter turn for each; a
    gain that is off turns nothing, nor does its sign.  Arrays over frequency, any shape.
    """
    ratio = value / asked
    if target.poles_at_origin == 1:
        ratio = ratio * np.where(ratio.real < 0, -1.0, 1.0)
    return np.asarray(np.abs(np.angle(ratio)) < LIKE_TARGET)


def is_decidable(target: TransferFunction) -> bool:
    """Whether the poles of a board of H(s) = `target` are on known sides of the imaginary axis:
    not where H(s) has a pair on it."""
    return not np.any((target.poles.real == 0) & (target.poles.imag != 0))


def turns_due(parts: tuple[TransferFunction, TransferFunction]) -> float:
    """Half turns of 1 + L, less the poles on the axis, in a stable closed loop: P + m/2."""
    right = sum(1 for tf in parts for p in tf.poles if p.real > 0)
    origin = sum(tf.poles_at_origin for tf in parts)
    cancelled = min(origin, sum(tf.zeros_at_origin for tf in parts))
    return right + (origin + cancelled) / 2


def freed_of_axis(
    frequency_hz: Real, loop: Complex, parts: tuple[TransferFunction, TransferFunction]
) -> Complex:
    """1 + L with its pairs of poles on the imaginary axis multiplied away; `loop` is L at
    `frequency_hz` [Hz], shapes (..., F)."""
    s = 2j * np.pi * frequency_hz
    product = np.asarray(1 + loop)
    for w0 in (p.imag for tf in parts for p in tf.poles if p.real == 0 and p.imag > 0):
        product = product * ((s * s + w0 * w0) / (s + w0) ** 2)
    return product


def settled_turns(
    response: Response,
    grid: Real,
    value: Complex,
    parts: tuple[TransferFunction, TransferFunction],
) -> tuple[Real, Complex, Real] | None:
    """How 1 + L turns from point to point [rad], without the poles on the axis, on a grid with
    points added until that is beyond doubt: frequencies [Hz], L, and one turn less; None when no
    reasonable number of points settles it."""
    keep = np.isfinite(value)
    grid, value = grid[keep], value[keep]
    while True:
        product = freed_of_axis(grid, value, parts)
        steps = np.angle(product[1:] / product[:-1])
        size = np.maximum(np.abs(value[1:]), np.abs(value[:-1]))
        apart = grid[1:] > grid[:-1] * (1 + 1e-12)
        wide = np.flatnonzero((np.abs(steps) > TURN) & (size > ROUND) & apart)
        if not wide.size:
            return grid, value, steps
        if grid.size + wide.size > MOST_POINTS:
            return None
        middle = np.sqrt(grid[wide] * grid[wide + 1])
        grid = np.insert(grid, wide + 1, middle)
        value = np.insert(value, wide + 1, response(middle))
