"""H(s) stated by its zeros, its poles and its gain, frequencies in Hz.

A real root at frequency f lies at s = -2 pi f: positive frequencies lie in the left half-plane,
negative ones in the right, 0 is the origin.  With a quality factor it is a conjugate pair,
s^2 + (w0/Q) s + w0^2 with w0 = 2 pi f, again in the right half-plane for a negative frequency.
Hz become rad/s by one fixed rational, so every factor is exact.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.errors import TargetError
from synth.polynomials import Polynomial
from synth.targets.bounds import (
    LARGEST_DEGREE,
    TWO_PI,
    checked_number,
    frequency_text,
    within_reach,
)
from synth.transfer import Factor, TransferFunction

__all__ = ["Root", "from_roots"]


@dataclass(frozen=True)
class Root:
    """One real root or one pair.

    Parameters
    ----------
    frequency_hz
        |root| / 2 pi [Hz]; negative in the right half-plane, 0 at the origin.
    q
        None for a real root; the quality factor of a pair, above 0: conjugate above 0.5,
        two real roots up to 0.5, on the imaginary axis when infinite.

    Raises
    ------
    TargetError
        A frequency that is not finite, a `q` that is not positive, a pair at the origin.
    """

    frequency_hz: Fraction | float
    q: Fraction | float | None = None

    def __post_init__(self) -> None:
        frequency = checked_number(
            self.frequency_hz, key="frequency", expected="a finite frequency"
        )
        if self.q is None:
            return
        if self.q != math.inf:
            q = checked_number(self.q, key="q", expected="a positive number")
            if q <= 0:
                raise TargetError(
                    f"got {float(q):g}, expected a positive number (a negative frequency puts "
                    "a pair into the right half-plane)",
                    key="q",
                )
        if not frequency:
            raise TargetError(
                "got a pair at 0 Hz, expected a frequency other than 0; list 0 twice for two "
                "roots at the origin",
                key="frequency",
            )

    @property
    def factor(self) -> Factor:
        """The exact real factor with these roots, in rad/s."""
        w0 = Fraction(self.frequency_hz) * TWO_PI
        return Factor.real(-w0) if self.q is None else Factor.pair(w0, self.q)


def from_roots(
    zeros: Sequence[Root],
    poles: Sequence[Root],
    gain: Fraction | float,
    gain_at: Fraction | float | str,
    *,
    key: str = "target",
) -> TransferFunction:
    """H(s) from its roots and one value.

    Parameters
    ----------
    zeros, poles
        Roots in Hz.
    gain
        |H| at `gain_at`, and a sign; not zero.
    gain_at
        ``"dc"`` or ``"inf"``: `gain` is H itself there, sign included.  Or a frequency [Hz]:
        |gain| is |H| there, and the sign of `gain` is that of the leading coefficient of H,
        numerator over monic denominator.  With an odd number of roots in the right half-plane
        that is *not* the sign of H at low frequencies: one zero there and a positive gain give
        H(0) < 0.  Use ``"dc"`` to fix the sign there.
    key
        Path in the job of what holds these, for messages.

    Raises
    ------
    TargetError
        A gain that is zero or not finite, a `gain_at` where H is zero or infinite, more than
        `LARGEST_DEGREE` roots, a root out of reach.

    Examples
    --------
    >>> low_pass = from_roots([], [Root(1000)], 2, "dc")
    >>> round(abs(complex(low_pass.response(1000))), 6)
    1.414214
    """
    level = checked_number(gain, key=f"{key}.gain", expected="a finite number other than 0")
    if not level:
        raise TargetError("got 0, expected a finite number other than 0", key=f"{key}.gain")
    zero_factors = tuple(z.factor for z in zeros)
    pole_factors = tuple(p.factor for p in poles)
    for name, factors in (("zeros", zero_factors), ("poles", pole_factors)):
        degree = sum(f.degree for f in factors)
        if degree > LARGEST_DEGREE:
            raise TargetError(
                f"got {degree} roots, expected at most {LARGEST_DEGREE}", key=f"{key}.{name}"
            )
    shape = TransferFunction.from_factors(1, zero_factors, pole_factors)
    within_reach(shape, key=key)
    where = f"{key}.gain_at"
    if gain_at == "dc":
        lead = level / _value_at_dc(shape, where)
    elif gain_at == "inf":
        lead = level / _value_at_infinity(shape, where)
    else:
        lead = level / _magnitude_at(shape, gain_at, where)
    return within_reach(TransferFunction.from_factors(lead, zero_factors, pole_factors), key=key)


def _value_at_dc(shape: TransferFunction, key: str) -> Fraction:
    numerator, denominator = shape.numerator[-1], shape.denominator[-1]
    if numerator and denominator:
        return numerator / denominator
    came = "infinite" if numerator else "zero" if denominator else "undefined"
    other = "a frequency" if shape.relative_degree else "'inf' or a frequency"
    raise TargetError(
        f"got 'dc', where H(s) is {came} because of its root at the origin; expected {other} "
        "inside the band",
        key=key,
    )


def _value_at_infinity(shape: TransferFunction, key: str) -> Fraction:
    if shape.relative_degree:
        came = "zero" if shape.relative_degree > 0 else "infinite"
        finite_at_dc = shape.numerator[-1] and shape.denominator[-1]
        other = "'dc' or a frequency" if finite_at_dc else "a frequency"
        raise TargetError(
            f"got 'inf', where H(s) is {came} (zeros: {len(shape.zeros)}, poles: {shape.order}); "
            f"expected {other} inside the band",
            key=key,
        )
    return Fraction(1)


def _magnitude_at(shape: TransferFunction, gain_at: object, key: str) -> Fraction:
    """|H| at a frequency [Hz], to a double."""
    expected = "'dc', 'inf' or a frequency above 0"
    hz = checked_number(gain_at, key=key, expected=expected)
    if hz <= 0:
        raise TargetError(f"got {float(hz):g} Hz, expected {expected}", key=key)
    w = hz * TWO_PI
    for name, factors in (("zero", shape.zero_factors), ("pole", shape.pole_factors)):
        for root in (r for f in factors for r in f.roots):
            if abs(root - 1j * float(w)) <= 1e-9 * abs(root):
                raise TargetError(
                    f"got {frequency_text(float(hz))}, which is a {name} of H(s); expected "
                    "'dc', 'inf' or another frequency, where H(s) is finite and not zero",
                    key=key,
                )
    return _square_root(_square_at(shape.numerator, w) / _square_at(shape.denominator, w))


def _square_at(p: Polynomial, w: Fraction) -> Fraction:
    """|p(j w)|^2, exact."""
    value, parts = Fraction(1), [Fraction(0), Fraction(0)]
    for k, c in enumerate(reversed(p)):
        parts[k % 2] += c * value * (-1 if k % 4 > 1 else 1)
        value *= w
    return parts[0] ** 2 + parts[1] ** 2


def _square_root(x: Fraction) -> Fraction:
    """The root of a positive rational to 30 digits, exact when it is rational."""
    top, bottom = math.isqrt(x.numerator), math.isqrt(x.denominator)
    if top * top == x.numerator and bottom * bottom == x.denominator:
        return Fraction(top, bottom)
    # 2^(2 shift) x has at least 200 bits before the point.
    shift = max(0, 100 - (x.numerator.bit_length() - x.denominator.bit_length()) // 2)
    return Fraction(math.isqrt((x.numerator << 2 * shift) // x.denominator), 1 << shift)
