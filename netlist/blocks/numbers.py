"""Gains as text: engineering notation with four digits."""

from __future__ import annotations

import math

__all__ = ["gain_text"]

_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}


def gain_text(value: float) -> str:
    """`value` with four significant digits and an SI prefix, or a power of ten far outside.

    From 0.1 to 1 there is no prefix: a ratio of 0.5 reads better than one of 500m.

    Examples
    --------
    >>> [gain_text(v) for v in (6283.2, -0.5, 1.0, 999.96, 2.5e-7, 3e22)]
    ['6.283k', '−0.5', '1', '1k', '250n', '3e22']
    """
    if value == 0 or not math.isfinite(value):
        return f"{value:g}"
    rounded = float(f"{abs(value):.3e}")
    sign = "−" if value < 0 else ""
    if 0.1 <= rounded < 1:
        return f"{sign}{rounded:.4g}"
    exponent = 3 * math.floor(math.log10(rounded) / 3 + 1e-9)
    if exponent not in _PREFIXES:
        mantissa, _, power = f"{rounded:.1e}".partition("e")
        return f"{sign}{float(mantissa):g}e{int(power)}".replace("-", "−")
    return f"{sign}{rounded / 10.0**exponent:.4g}{_PREFIXES[exponent]}"
