"""The frequencies at which a response is judged."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from synth.transfer import TransferFunction

__all__ = ["judging_frequencies"]

Real = NDArray[np.float64]

FEWEST = 201
MOST = 4001
POINTS_IN_A_PEAK = 8


def judging_frequencies(target: TransferFunction, band_hz: tuple[float, float]) -> Real:
    """Frequencies over the band in equal ratios, both ends included, shape (F,) [Hz].

    At least 201, and enough for 8 points within the half-power width of the sharpest pair of
    poles or zeros near the band, up to 4001.  A point on a zero on the imaginary axis, where
    no relative error exists, is left out.
    """
    low, high = band_hz
    near = [
        factor
        for factor in (*target.pole_factors, *target.zero_factors)
        if low / 2 <= factor.natural_frequency / (2 * np.pi) <= 2 * high
    ]
    sharpest = max((min(abs(f.q), 100.0) for f in near), default=0.5)
    wanted = math.log(high / low) * sharpest * POINTS_IN_A_PEAK
    count = min(max(FEWEST, math.ceil(wanted) + 1), MOST)
    grid = np.geomspace(low, high, count)
    grid[0], grid[-1] = low, high
    for factor in target.zero_factors:
        if factor.degree == 2 and math.isinf(factor.q):
            zero_hz = factor.natural_frequency / (2 * np.pi)
            grid = grid[np.abs(grid / zero_hz - 1) > 1e-9]
    return np.asarray(grid)
