"""Frequency grids: how dense, and exactly the points of SPICE sweeps by decades.

Frequencies in Hz.  Errors over a band are taken on one grid everywhere, the one on which
``.ac dec`` computes, so that two opinions can be compared point by point.  One sweep covers the
band; about a resonance or a notch too sharp for that, further ones lie within each other, each a
tenth as wide and up to ten times as dense, so that the spacing grows with the distance.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.errors import JobError
from synth.transfer import TransferFunction

__all__ = [
    "Sweep",
    "band_grid",
    "joined",
    "judged",
    "judging_frequencies",
    "points_per_decade",
    "sweeps",
]

SMALLEST_DENSITY = 50
LARGEST_DENSITY = 2000
POINTS_ACROSS_RESONANCE = 8
FEWEST_INTERVALS = 200

# Sweeps about a pair of poles or zeros that the largest density does not resolve: how far each
# reaches (a ratio) and its largest density.  The first reaches farther than what a resonance may
# shift by on a board that has any chance: at 2.5 % and a Q of 100 the error is 14 dB.
AROUND_SHARP = ((25e-3, 30_000), (2.5e-3, 300_000), (0.25e-3, 3_000_000))

# Across the width of such a pair.  Board and target differ by a peak or by the slope between two
# peaks that are less than a width apart; with so many points what falls between is below 1 %.
POINTS_ACROSS_SHARP = 12

DENSEST_GRID = 100_000
NARROWEST_BAND = 1e-6  # A sweep holds its points per decade in 32 bits.
ON_A_ZERO = 1e-9
_DECIMALS = re.compile(r"(\d+)(?:\.(\d*))?(?:e([+-]?\d+))?")


@dataclass(frozen=True)
class Sweep:
    """``.ac dec points_per_decade start_hz stop_hz``."""

    start_hz: float
    stop_hz: float
    points_per_decade: int

    @property
    def frequencies(self) -> NDArray[np.float64]:
        """Its frequencies to the last bit [Hz]; see `band_grid`."""
        return band_grid((self.start_hz, self.stop_hz), self.points_per_decade)


def sweeps(target: TransferFunction, band_hz: tuple[float, float]) -> tuple[Sweep, ...]:
    """The sweeps on whose points errors are taken: one over the band, then those about pairs of
    poles or zeros of `target` that are sharper than it resolves, as far as they lie in the band."""
    whole = Sweep(*band_hz, points_per_decade(target, band_hz=band_hz))
    found = [whole]
    for pair in (*target.pole_factors, *target.zero_factors):
        if pair.degree != 2 or not math.isfinite(pair.q):
            continue
        wanted = math.log(10) * abs(pair.q)
        if POINTS_ACROSS_RESONANCE * wanted <= whole.points_per_decade:
            continue
        f0 = pair.natural_frequency / (2 * math.pi)
        for reach, densest in AROUND_SHARP:
            low, high = max(band_hz[0], f0 * (1 - reach)), min(band_hz[1], f0 * (1 + reach))
            density = min(math.ceil(POINTS_ACROSS_SHARP * wanted), densest)
            # ngspice never ends on a sweep of less than one step.
            if high > low * (1 + NARROWEST_BAND) and math.log10(high / low) * density >= 2:
                found.append(Sweep(low, high, density))
            if density < densest:
                break
    return tuple(dict.fromkeys(found))


def joined(parts: Sequence[NDArray[np.float64]]) -> NDArray[np.intp]:
    """Which of the frequencies of several sweeps, one after the other, are those of all of them in
    rising order, each once."""
    found: NDArray[np.intp] = np.unique(np.concatenate(parts), return_index=True)[1]
    return found


def points_per_decade(
    target: TransferFunction, *, band_hz: tuple[float, float] | None = None
) -> int:
    """Points per decade over the whole band for the sharpest pair of poles or zeros of `target`.

    A pair of quality Q is w0/Q wide, 1/(Q ln 10) decades; 8 points fall across it, up to a Q of
    108; what is sharper has points of its own beside these, see `sweeps`.  A pair on the imaginary
    axis has no width and counts as nothing for zeros, as the largest density for poles.

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

    Those of the simulator's `sweeps`, less the ones on a zero on the imaginary axis.

    Raises
    ------
    JobError
        As `band_grid`.
    """
    parts = [sweep.frequencies for sweep in sweeps(target, band_hz)]
    grid = np.concatenate(parts)[joined(parts)]
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
