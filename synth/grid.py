"""Frequency grids: how dense, and exactly the points of a SPICE sweep by decades.

Frequencies in Hz.  Errors over a band are taken on one grid everywhere, the one on which
``.ac dec`` computes, so that two opinions can be compared point by point.
"""

from __future__ import annotations

import math
import re

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.errors import JobError
from synth.transfer import TransferFunction

__all__ = ["band_grid", "judged", "judging_frequencies", "points_per_decade"]

SMALLEST_DENSITY = 50
LARGEST_DENSITY = 2000
POINTS_ACROSS_RESONANCE = 8
FEWEST_INTERVALS = 200
DENSEST_GRID = 100_000
NARROWEST_BAND = 1e-6  # A sweep holds its points per decade in 32 bits.
ON_A_ZERO = 1e-9
_DECIMALS = re.compile(r"(\d+)(?:\.(\d*))?(?:e([+-]?\d+))?")


def points_per_decade(
    target: TransferFunction, *, band_hz: tuple[float, float] | None = None
) -> int:
    """Points per decade that resolve the sharpest pair of poles or zeros of `target`.

    A pair of quality Q is w0/Q wide, 1/(Q ln 10) decades; 8 points fall across it.  A pair on
    the imaginary axis has no width and counts as nothing for zeros, as the largest density
    for poles.

    Parameters
    ----------
    target
        H(s).
    band_hz
        Lowest and highest frequency [Hz].  Given, a band still gets 200 intervals.

    Returns
    -------
    int
        50 to 2000, above that only for a band narrower than a tenth of a decade.
    """
    zeros = (abs(f.q) for f in target.zero_factors if math.isfinite(f.q))
    sharpest = max(target.largest_q, max(zeros, default=0.5))
    wanted = POINTS_ACROSS_RESONANCE * math.log(10) * sharpest
    density = math.ceil(min(max(wanted, SMALLEST_DENSITY), LARGEST_DENSITY))
    if band_hz is None:
        return density
    decades = math.log10(band_hz[1] / band_hz[0])
    # The margin keeps rounding from losing the last interval.
    return max(density, math.ceil((FEWEST_INTERVALS + 1e-6) / decades))


def band_grid(band_hz: tuple[float, float], points_per_decade: int) -> NDArray[np.float64]:
    """The frequencies of ``.ac dec points_per_decade low high``, to the last bit [Hz].

    The sweep takes floor(n log10(high/low)) equal steps of the logarithm from low to high and
    multiplies its way up, so the points per decade are at least n and the last point is high
    up to rounding (read off the results of ngspice 39).  Where n times the decades is a whole
    number, the count hangs on the last bit; low and high are therefore taken as SPICE reads
    their decimals.

    Raises
    ------
    JobError
        A band too narrow for one step, on which the simulator would never end, or too many
        points.
    """
    if not all(math.isfinite(f) and f > 0 for f in band_hz):
        raise JobError(f"got {band_hz}, expected two positive frequencies", key="signal.band")
    low, high = (_as_spice_reads(f) for f in band_hz)
    if low >= high:
        raise JobError(
            f"got {low:g} Hz to {high:g} Hz, expected lowest < highest", key="signal.band"
        )
    if high / low < 1 + NARROWEST_BAND:
        raise JobError(
            f"got {band_hz[0]!r} Hz to {band_hz[1]!r} Hz, expected the highest at least "
            f"{100 * NARROWEST_BAND:g} % above the lowest",
            key="signal.band",
        )
    if math.isinf(high / low):
        raise JobError(
            f"got {low:g} Hz to {high:g} Hz, expected fewer decades than that", key="signal.band"
        )
    steps = math.floor(abs(math.log10(high / low)) * points_per_decade)
    if steps < 1:
        raise JobError(
            f"got {low!r} Hz to {high!r} Hz at {points_per_decade} points per decade, expected a "
            "band at least one step wide",
            key="signal.band",
        )
    if steps > DENSEST_GRID:
        raise JobError(
            f"got {steps} points from {low:g} Hz to {high:g} Hz, expected at most {DENSEST_GRID}",
            key="signal.band",
        )
    ratio = math.exp(math.log(high / low) / steps)
    factors = np.full(steps + 1, ratio)
    factors[0] = low
    return np.cumprod(factors)


def judging_frequencies(
    target: TransferFunction, band_hz: tuple[float, float]
) -> NDArray[np.float64]:
    """The frequencies at which errors over the band are taken, shape (F,) [Hz].

    Those of the simulator's sweep, less the ones on a zero on the imaginary axis.

    Raises
    ------
    JobError
        As `band_grid`.
    """
    grid = band_grid(band_hz, points_per_decade(target, band_hz=band_hz))
    return grid[judged(target, grid)]


def judged(target: TransferFunction, frequency_hz: ArrayLike) -> NDArray[np.bool_]:
    """Where a relative error exists: everywhere but on a zero on the imaginary axis."""
    frequency = np.asarray(frequency_hz, dtype=float)
    keep = np.ones(frequency.shape, dtype=bool)
    for factor in target.zero_factors:
        if factor.degree == 2 and math.isinf(factor.q):
            keep &= np.abs(2 * np.pi * frequency / factor.natural_frequency - 1) > ON_A_ZERO
    return keep


def _as_spice_reads(value: float) -> float:
    """A positive number as SPICE3 reads its shortest decimals: all digits as one whole number
    in doubles, times a power of ten, which may miss the nearest double by a few last bits."""
    found = _DECIMALS.fullmatch(repr(float(value)))
    if found is None:
        raise JobError(f"got {value}, expected a positive number")
    whole, fraction, exponent = found.groups(default="")
    mantissa = 0.0
    for digit in whole + fraction:
        mantissa = 10 * mantissa + int(digit)
    return mantissa * math.pow(10.0, int(exponent or "0") - len(fraction))
