"""Preferred values of resistors and capacitors: the series of IEC 60063.

E3 to E24 are the values the standard lists; they are older than its formula and differ from
it.  E48 to E192 are 10^(k/N) rounded to three digits, with one exception: 9.20 in E192.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.errors import JobError

__all__ = ["SERIES", "decade", "is_member", "nearest", "series_values"]

Real = NDArray[np.float64]

_E24 = (
    100, 110, 120, 130, 150, 160, 180, 200, 220, 240, 270, 300,
    330, 360, 390, 430, 470, 510, 560, 620, 680, 750, 820, 910,
)  # fmt: skip
# The exception: the formula gives 9.19 at k = 185.
_E192 = tuple(920 if k == 185 else round(100 * 10 ** (k / 192)) for k in range(192))
_DECADES: Mapping[str, tuple[int, ...]] = {
    "E3": _E24[::8],
    "E6": _E24[::4],
    "E12": _E24[::2],
    "E24": _E24,
    "E48": _E192[::4],
    "E96": _E192[::2],
    "E192": _E192,
}

SERIES: tuple[str, ...] = tuple(_DECADES)
"""Names of the series, from the coarsest to the finest."""

_SLACK = 1e-9
"""Relative room for rounding when a value is compared with another: far below the finest
step (1.2 %), far above the error of a double."""


def decade(series: str, *, key: str = "") -> tuple[int, ...]:
    """The values of one decade, times 100: (100, 220, 470) for E3.

    Raises
    ------
    JobError
        An unknown series.
    """
    if series not in _DECADES:
        raise JobError(f"got the series {series!r}, expected one of {', '.join(SERIES)}", key=key)
    return _DECADES[series]


def series_values(series: str, smallest: float, largest: float) -> Real:
    """Every value of a series from `smallest` to `largest`, both included, ascending.

    Each value is the double nearest to its decimal literal: 10200.0, 2.2e-09.  May be empty.

    Raises
    ------
    JobError
        An unknown series, or a range that is not 0 < smallest <= largest.

    Examples
    --------
    >>> series_values("E3", 1e3, 1e4)
    array([ 1000.,  2200.,  4700., 10000.])
    """
    digits = decade(series)
    if not (0 < smallest <= largest < math.inf):
        raise JobError(f"got {smallest} to {largest}, expected 0 < smallest <= largest")
    low, high = smallest * (1 - _SLACK), largest * (1 + _SLACK)
    exponents = range(math.floor(math.log10(low)) - 1, math.ceil(math.log10(high)) + 1)
    values = (float(f"{d}e{e - 2}") for e in exponents for d in digits)
    return np.array([v for v in values if low <= v <= high], dtype=np.float64)


def nearest(values: ArrayLike, x: float) -> float:
    """The one of ascending positive `values`, shape (n,), nearest to `x` in ratio; the smaller
    of two equally near, the end of the list for an `x` beyond it.

    Raises
    ------
    JobError
        No values, or an `x` that is not positive and finite.

    Examples
    --------
    >>> nearest(series_values("E12", 1e3, 1e6), 14000.0)
    15000.0
    """
    known = np.asarray(values, dtype=np.float64)
    if known.size == 0 or not 0 < x < math.inf:
        raise JobError(f"got {x} and {known.size} values, expected a positive one and some values")
    k = int(np.searchsorted(known, x))
    if k in (0, known.size):
        return float(known[min(k, known.size - 1)])
    below, above = float(known[k - 1]), float(known[k])
    return below if x / below <= above / x else above


def is_member(series: str, value: float) -> bool:
    """Whether `value` is one of the series in any decade (to 1e-9, for values computed).

    >>> is_member("E96", 10.2e3), is_member("E24", 10.2e3)
    (True, False)
    """
    digits = decade(series)
    if not 0 < value < math.inf:
        return False
    exponent = math.floor(math.log10(value * (1 + _SLACK)))
    scaled = value / 10.0**exponent * 100
    return any(math.isclose(scaled, d, rel_tol=_SLACK) for d in digits)
