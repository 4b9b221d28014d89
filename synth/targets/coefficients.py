"""H(s) stated by the coefficients of its numerator and denominator.

Descending powers of s, s in rad/s.  Floats are taken at their exact binary value.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

from synth.errors import TargetError
from synth.targets.bounds import checked_number, from_exact_polynomials
from synth.transfer import TransferFunction

__all__ = ["from_coefficients"]


def from_coefficients(
    numerator: Sequence[Fraction | float],
    denominator: Sequence[Fraction | float],
    *,
    key: str = "target",
) -> TransferFunction:
    """H(s) from coefficients.

    Parameters
    ----------
    numerator, denominator
        Descending powers of s [rad/s]; leading zeros are dropped.  Common factors stay.
    key
        Path in the job of what holds the two lists, for messages.

    Raises
    ------
    TargetError
        An empty list, a coefficient that is no finite number, a zero polynomial, a degree
        above `LARGEST_DEGREE`, a root out of reach.

    Examples
    --------
    A lead network with its zero at 1 rad/s and its pole at 10 rad/s.

    >>> lead = from_coefficients([10, 10], [1, 10])
    >>> float(lead.zeros[0].real), float(lead.poles[0].real)
    (-1.0, -10.0)
    """
    exact = []
    for name, given in (("numerator", numerator), ("denominator", denominator)):
        where = f"{key}.{name}"
        if isinstance(given, str | bytes) or not isinstance(given, Sequence):
            raise TargetError(f"got {given!r:.60}, expected a list of coefficients", key=where)
        values = [checked_number(c, key=f"{where}[{k}]") for k, c in enumerate(given)]
        if not any(values):
            came = "no coefficient" if not values else "only zeros"
            raise TargetError(f"got {came}, expected a nonzero coefficient", key=where)
        exact.append(values)
    return from_exact_polynomials(exact[0], exact[1], key=key)
