"""Roots of a polynomial, found in long arithmetic and proven digit by digit.

The iteration is that of Aberth with starting points from the Newton polygon: D. A. Bini,
"Numerical computation of polynomial zeros by means of Aberth's method", Numerical Algorithms
13, 1996 (from memory).  Its precision grows until inclusion discs prove every digit of a
double: B. T. Smith, "Error bounds for zeros of a polynomial based upon Gerschgorin's theorems",
Journal of the ACM 17, 1970 (from memory).

Polynomials are in descending powers with exact coefficients.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from fractions import Fraction
from itertools import pairwise
from typing import Any

from synth.errors import NumericalError

__all__ = ["separated_roots"]

Mp = Any  # a number of mpmath, real or complex; mpmath ships no types
_PRECISIONS = (106, 212, 424, 848, 1696, 3392)  # [bit]
_ENOUGH = 2.0**-58  # relative error of a real or imaginary part that rounds to the right double


def separated_roots(p: Sequence[Fraction], *, mirrored: bool = False) -> list[complex]:
    """Roots of a polynomial without repeated roots and without a root at the origin.

    Parameters
    ----------
    p
        Coefficients, descending powers, the first and the last not zero.
    mirrored
        Whether -s is a root with every root s; only then are roots on the imaginary axis
        told from roots close to it.

    Returns
    -------
    list of complex
        In no order; real and imaginary part each correct to a double or exactly 0.

    Raises
    ------
    NumericalError
        The roots lie too close together to be separated, or beyond the range of a double.
    """
    import mpmath

    n = len(p) - 1
    if n == 0:
        return []
    # In s / 2^shift the roots have a geometric mean of about 1.
    shift = round((_log2(p[-1]) - _log2(p[0])) / n)
    scaled = [c / Fraction(2) ** (shift * k) for k, c in enumerate(p)]
    points: list[Mp] = []
    for bits in _PRECISIONS:
        with mpmath.workprec(bits):
            coefficients = [mpmath.mpf(c.numerator) / c.denominator for c in scaled]
            points = _aberth(coefficients, points or _starting_points(scaled))
            found = _settled(points, _inclusion_radii(coefficients, points), mirrored)
            if found is not None:
                return [_as_double(z, shift) for z in found]
    raise NumericalError(
        "the roots of a polynomial could not be separated; state the target by its "
        "zeros and poles instead"
    )


def _as_double(z: Mp, shift: int) -> complex:
    """z 2^shift as a double."""
    import mpmath

    if abs(mpmath.mag(z) + shift) > 1000:
        raise NumericalError("a root of a polynomial lies beyond the range of a double")
    return complex(mpmath.ldexp(z.real, shift), mpmath.ldexp(z.imag, shift))


def _log2(value: Fraction) -> float:
    """log2 |value| of a nonzero rational of any size."""
    top, bottom = abs(value.numerator), value.denominator
    lost = max(0, top.bit_length() - 64) - max(0, bottom.bit_length() - 64)
    top >>= max(0, top.bit_length() - 64)
    bottom >>= max(0, bottom.bit_length() - 64)
    return math.log2(top) - math.log2(bottom) + lost


def _starting_points(p: Sequence[Fraction]) -> list[Mp]:
    """As many points as roots, on circles whose radii are the slopes of the Newton polygon."""
    import mpmath

    n = len(p) - 1
    corners: list[tuple[int, float]] = []  # upper convex hull of log2 |coefficient of s^k|
    for k in range(n + 1):
        if not p[n - k]:
            continue
        level = _log2(p[n - k])
        while len(corners) > 1:
            (k0, level0), (k1, level1) = corners[-2:]
            if (level1 - level0) * (k - k0) > (level - level0) * (k1 - k0):
                break
            corners.pop()
        corners.append((k, level))
    points = []
    for (k, low), (m, high) in pairwise(corners):
        radius = mpmath.mpf(2) ** ((low - high) / (m - k))
        for j in range(m - k):
            # An angle that puts no point on the real axis and no two points opposite.
            angle = 2 * math.pi * j / (m - k) + 2 * math.pi * k / n + 0.7
            points.append(radius * mpmath.mpc(math.cos(angle), math.sin(angle)))
    return points


def _evaluate(p: Sequence[Mp], z: Mp) -> tuple[Mp, Mp, Mp]:
    """p(z), dp/ds(z) and a bound of the rounding error of p(z), at the working precision."""
    import mpmath

    value, slope, size, modulus = p[0], mpmath.mpf(0), abs(p[0]), abs(z)
    for c in p[1:]:
        slope = slope * z + value
        value = value * z + c
        size = size * modulus + abs(c)
    return value, slope, size * (8 * len(p) * mpmath.eps)


def _aberth(p: Sequence[Mp], points: Sequence[Mp]) -> list[Mp]:
    """Points moved towards the roots until p vanishes there but for rounding."""
    import mpmath

    z = list(points)
    moving = set(range(len(z)))
    for _ in range(100):
        for i in sorted(moving):
            value, slope, error = _evaluate(p, z[i])
            if abs(value) <= error:
                moving.discard(i)
                continue
            tiny = z[i] * mpmath.eps
            pull = sum(1 / (z[i] - other or tiny) for j, other in enumerate(z) if j != i)
            z[i] -= value / (slope - value * pull or tiny)
        if not moving:
            break
    return z


def _inclusion_radii(p: Sequence[Mp], z: Sequence[Mp]) -> list[Mp]:
    """Radii of discs about the points: every root is in one, and a disc that meets no other
    holds exactly one root (Smith 1970)."""
    import mpmath

    radii = []
    for i, point in enumerate(z):
        value, _, error = _evaluate(p, point)
        apart = mpmath.fprod(abs(point - other) for j, other in enumerate(z) if j != i)
        radii.append(1.01 * len(z) * (abs(value) + error) / apart if apart else mpmath.inf)
    return radii


def _settled(z: Sequence[Mp], radii: Sequence[Mp], mirrored: bool) -> list[Mp] | None:
    """The points with their zero parts made exact, or None while the discs do not prove
    every digit of them."""
    import mpmath

    def alone(i: int, point: Mp) -> bool:
        """Whether the disc of i, moved to a mirror image of its centre, meets only its own."""
        return all(abs(point - other) > radii[i] + radii[j] for j, other in enumerate(z) if j != i)

    found = []
    for i, (point, radius) in enumerate(zip(z, radii, strict=True)):
        re, im = point.real, point.imag
        if abs(im) <= radius and alone(i, mpmath.mpc(re, -im)):
            im = mpmath.mpf(0)
        elif mirrored and abs(re) <= radius and alone(i, mpmath.mpc(-re, im)):
            re = mpmath.mpf(0)
        proven = all(not part or radius <= _ENOUGH * abs(part) for part in (re, im))
        if not (proven and alone(i, point)):
            return None
        found.append(mpmath.mpc(re, im))
    return found
