"""Numbers as the report prints them: few digits, engineering prefixes, units that stay on the
line of their number."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable

from synth.quantities import show_share

__all__ = [
    "NONE",
    "decibel",
    "listed",
    "number",
    "percent",
    "prefixed",
    "quantity",
    "scientific",
    "share",
    "spelled",
    "stated",
]

NONE = "–"
_SPACE = "\N{NO-BREAK SPACE}"
_MINUS = "\N{MINUS SIGN}"
_HERTZ = re.compile(r"(?<![\w.])(\d+(?:\.\d+)?(?:e[+-]?\d+)?) Hz\b")
_PREFIXES = {
    -18: "a",
    -15: "f",
    -12: "p",
    -9: "n",
    -6: "µ",
    -3: "m",
    0: "",
    3: "k",
    6: "M",
    9: "G",
    12: "T",
}


def number(value: float | None, digits: int = 3) -> str:
    """`value` to `digits` significant digits, without a power of ten where that reads well.

    Examples
    --------
    >>> number(0.012345), number(12345.6), number(None)
    ('0.0123', '12300', '–')
    """
    if value is None or not math.isfinite(value):
        return NONE
    if value == 0:
        return "0"
    if 1e-4 <= abs(value) < 1e6:
        rounded = float(f"{value:.{digits - 1}e}")
        decimals = digits - 1 - math.floor(math.log10(abs(rounded)))
        return f"{rounded:.{max(decimals, 0)}f}".replace("-", _MINUS)
    mantissa, exponent = scientific(value, digits)
    return f"{mantissa}·10{_raised(exponent)}" if exponent else mantissa


def quantity(value: float | None, unit: str, digits: int = 3) -> str:
    """`value` in `unit` with an engineering prefix.

    Examples
    --------
    >>> quantity(10200.0, "Ω"), quantity(2.2e-9, "F"), quantity(0.0, "V")
    ('10.2\\xa0kΩ', '2.20\\xa0nF', '0\\xa0V')
    """
    if value is None or not math.isfinite(value):
        return NONE
    if value == 0:
        return f"0{_SPACE}{unit}"
    exponent = math.floor(math.log10(abs(float(f"{value:.{digits - 1}e}"))))
    power = min(max(3 * (exponent // 3), min(_PREFIXES)), max(_PREFIXES))
    decimals = max(digits - 1 - (exponent - power), 0)
    text = f"{value / 10.0**power:.{decimals}f}".replace("-", _MINUS)
    return f"{text}{_SPACE}{_PREFIXES[power]}{unit}"


def stated(value: float | None, unit: str) -> str:
    """A value someone chose, in `unit`: up to six digits, without zeros that say nothing.

    Examples
    --------
    >>> stated(10200.0, "Ω"), stated(0.5, "dB"), stated(0.01, "%"), stated(1e7, "V/s")
    ('10.2\\xa0kΩ', '0.5\\xa0dB', '1\\xa0%', '10\\xa0MV/s')
    """
    if value is None or not math.isfinite(value):
        return NONE
    if unit in ("dB", "deg", "%"):
        text = number(100 * value if unit == "%" else value, 6)
        return f"{_trimmed(text)}{_SPACE}{unit}"
    text, _, rest = quantity(value, unit, 6).partition(_SPACE)
    return f"{_trimmed(text)}{_SPACE}{rest}"


def decibel(value: float | None) -> str:
    """A level or an error in dB or degrees: up to four decimals, three digits."""
    if value is None or not math.isfinite(value):
        return NONE
    if abs(value) < 5e-5:
        return "0.0000"
    return number(value, 3)


def percent(ratio: float | None, digits: int = 3) -> str:
    """A ratio in percent."""
    if ratio is None or not math.isfinite(ratio):
        return NONE
    return f"{number(100 * ratio, digits)}{_SPACE}%"


def share(ratio: float | None) -> str:
    """A share of boards in percent, never rounded to all or none of them.

    Examples
    --------
    >>> share(0.9996), share(0.99998), share(1.0)
    ('99.96\\xa0%', '99.998\\xa0%', '100\\xa0%')
    """
    if ratio is None or not math.isfinite(ratio):
        return NONE
    return show_share(ratio).replace(" ", _SPACE)


def prefixed(text: str) -> str:
    """A text with its plain numbers of hertz as the page prints them.

    Examples
    --------
    >>> prefixed("largest at 7.779e+04 Hz"), prefixed("0.5 V at 12 Hz, 5 kHz")
    ('largest at 77.8\\xa0kHz', '0.5 V at 12.0\\xa0Hz, 5 kHz')
    """
    return _HERTZ.sub(lambda found: quantity(float(found[1]), "Hz"), text)


def scientific(value: float, digits: int = 6) -> tuple[str, int]:
    """Mantissa and power of ten; a value that reads well as it is has power 0.

    Examples
    --------
    >>> scientific(1234.5), scientific(3.9478e7), scientific(-2.5e-7, 3)
    (('1234.5', 0), ('3.9478', 7), ('−2.5', -7))
    """
    if value == 0:
        return "0", 0
    if 1e-3 <= abs(value) < 1e5:
        return f"{value:.{digits}g}".replace("-", _MINUS), 0
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    return mantissa.replace("-", _MINUS), int(exponent)


def listed(words: Iterable[str]) -> str:
    """Words as a list is read: ``"R1, R2 and R3"``."""
    *first, last = words
    return f"{', '.join(first)} and {last}" if first else last


def spelled(name: str) -> str:
    """A name of a kind or a class in words: ``"spare_op_amp"`` is a spare op-amp."""
    return name.replace("op_amp", "op-amp").replace("_", " ")


def _trimmed(digits: str) -> str:
    return digits.rstrip("0").rstrip(".") if "." in digits and "·" not in digits else digits


def _raised(exponent: int) -> str:
    return str(exponent).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
