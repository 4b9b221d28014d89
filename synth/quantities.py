"""Quantities as people write them: ``"4k7"``, ``"10 nF"``, ``"8 nV/rtHz"`` <-> SI numbers.

Conventions
-----------
- A text is a number and a unit, ``"4.7 kohm"``; or a number with the prefix standing for the
  decimal point (IEC 60062), ``"4k7"``, with or without the unit.  Left out, the unit is the
  one asked for, so ``"4.7k"`` and ``"4700"`` are resistances where a resistance is expected.
- ``M`` is mega and ``m`` is milli, always.  ``meg``, ``Meg`` and ``MEG`` are mega too, since
  they can mean nothing else; ``K`` is kilo.  Only prefixes in use with a unit are read with it:
  a capacitance knows f to m, a resistance m to G.
- A plain number is in the SI unit (a rate in V/s, a percentage as a ratio, a temperature
  coefficient in 1/K), a level in dB, an angle in degrees, a temperature in degrees Celsius.
- The micro sign, the Greek mu, ``Ω``, ``°``, ``√Hz`` and the minus sign U+2212 are read as
  ``u``, ``ohm``, ``deg``, ``rtHz`` and ``-``.
- Values are computed in rationals, so ``"10.2 kohm"`` is the double 10200.0 exactly.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

from synth.errors import QuantityError

__all__ = [
    "UNITS",
    "marking",
    "parse",
    "parse_exact",
    "parse_rails",
    "show",
    "show_share",
    "tolerance_letter",
    "what_came",
]

_PREFIXES = {"f": -15, "p": -12, "n": -9, "u": -6, "m": -3, "k": 3, "K": 3, "M": 6, "G": 9}
_LONGEST = 64  # characters of a quantity
_RANGE = (Fraction(10) ** -300, Fraction(10) ** 300)  # within the doubles, with room to scale


@dataclass(frozen=True)
class _Quantity:
    """How one kind of quantity is written: units with their scale to SI, allowed prefixes, the
    letter that may stand for the decimal point without scaling."""

    expected: str
    spellings: Mapping[str, Fraction]
    prefixes: str = ""
    point: str = ""


def _plain(*spellings: str) -> dict[str, Fraction]:
    return dict.fromkeys(spellings, Fraction(1))


_RATE = _Quantity(
    "a rate such as '5 V/us'",
    {"V/s": Fraction(1), "V/ms": Fraction(10**3), "V/us": Fraction(10**6)},
    "kKM",
)
_KINDS: Mapping[str, _Quantity] = {
    "ohm": _Quantity(
        "a resistance such as '4.7 kohm' or '4k7'",
        _plain("ohm", "ohms", "Ohm", "R"),
        "mkKMG",
        "R",
    ),
    "F": _Quantity("a capacitance such as '10 nF' or '2n2'", _plain("F"), "fpnum"),
    "V": _Quantity("a voltage such as '2 V' or '5 mV'", _plain("V"), "numkK", "V"),
    "Hz": _Quantity("a frequency such as '50 Hz' or '1 MHz'", _plain("Hz"), "mkKMG"),
    "A": _Quantity("a current such as '100 nA'", _plain("A"), "fpnum"),
    "s": _Quantity("a time such as '50 us'", _plain("s"), "pnum"),
    "%": _Quantity(
        "a percentage such as '1 %' or a plain ratio such as 0.01", {"%": Fraction(1, 100)}
    ),
    "ppm/K": _Quantity(
        "a temperature coefficient such as '50 ppm/K'",
        dict.fromkeys(("ppm/K", "ppm/degC"), Fraction(1, 10**6)),
    ),
    "degC": _Quantity("a temperature such as '25 degC'", _plain("degC")),
    "dB": _Quantity("a level such as '0.5 dB'", _plain("dB")),
    "deg": _Quantity("an angle such as '3 deg'", _plain("deg")),
    "V/s": _RATE,
    "V/us": _RATE,
    "V/rtHz": _Quantity("a noise density such as '8 nV/rtHz'", _plain("V/rtHz"), "fpnum"),
    "A/rtHz": _Quantity("a noise density such as '0.5 pA/rtHz'", _plain("A/rtHz"), "fpnum"),
    "ratio": _Quantity(
        "a plain ratio such as 2.5 or a level such as '100 dB'",
        {"V/V": Fraction(1), "V/mV": Fraction(10**3), "V/uV": Fraction(10**6)},
    ),
}

UNITS: tuple[str, ...] = tuple(_KINDS)
"""Every unit `parse` and `show` know; ``"ratio"`` is a plain number."""

_LETTERS = {
    "resistor": {0: "R", 3: "K", 6: "M", 9: "G"},
    "capacitor": {-12: "p", -9: "n", -6: "µ", -3: "m", 0: "F"},
}
_TOLERANCES = {"B": 0.1, "C": 0.25, "D": 0.5, "F": 1.0, "G": 2.0, "J": 5.0, "K": 10.0, "M": 20.0}
# Micro sign, Greek mu, Greek Omega, ohm sign, minus sign, degree sign.
_SAME = {0xB5: "u", 0x3BC: "u", 0x3A9: "ohm", 0x2126: "ohm", 0x2212: "-", 0xB0: "deg"}
_NUMBER = re.compile(r"([+-]?)([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]{1,3})?\s*(.*)", re.DOTALL)
_MARKED = re.compile(r"([+-]?)([0-9]*)([A-Za-z])([0-9]+)\s*(.*)", re.DOTALL)


def parse(value: object, unit: str, *, key: str = "", signed: bool = False) -> float:
    """A quantity as a double in SI units (dB for a level, degrees for an angle).

    Parameters
    ----------
    value
        A text such as ``"4k7"`` or a number.
    unit
        One of `UNITS`; ``"ratio"`` also reads a level in dB.
    key
        Path of the key in the job, for the message.
    signed
        Whether a sign makes sense here.

    Raises
    ------
    QuantityError
        Not a quantity of that unit, not finite, or with a sign where none makes sense.

    Examples
    --------
    >>> parse("4k7", "ohm"), parse("2.2 nF", "F"), parse("100 dB", "ratio")
    (4700.0, 2.2e-09, 100000.0)
    """
    return float(parse_exact(value, unit, key=key, signed=signed))


def parse_exact(value: object, unit: str, *, key: str = "", signed: bool = False) -> Fraction:
    """The same as `parse`, exact: ``"0.1 Hz"`` is 1/10.  Only dB to a ratio is rounded."""
    kind = _KINDS[unit]

    def refuse(why: str = "") -> QuantityError:
        return QuantityError(f"got {what_came(value)}{why}, expected {kind.expected}", key=key)

    if isinstance(value, str):
        number = _text_value(value, kind, unit, signed=signed, refuse=refuse)
    else:
        number = _plain_value(value)
    if number is not None and unit == "%" and abs(number) > 1 and "%" not in str(value):
        number = None  # 99 for "99 %" is a slip that must not pass
    if number is None or not (number == 0 or _RANGE[0] <= abs(number) <= _RANGE[1]):
        raise refuse()
    if number < 0 and not signed:
        raise refuse(" with a sign")
    return number


def parse_rails(value: object, *, key: str = "") -> tuple[float, float]:
    """The negative and the positive rail [V] of ``"±12 V"`` or ``["-5 V", "12 V"]``.

    Raises
    ------
    QuantityError
        Neither of the two.
    """
    if isinstance(value, list) and len(value) == 2:
        low, high = (parse(v, "V", key=key, signed=True) for v in value)
        return low, high
    if isinstance(value, str):
        text = value.strip()
        for sign in ("±", "+/-", "+-"):
            if text.startswith(sign):
                rail = parse(text.removeprefix(sign).strip(), "V", key=key)
                return -rail, rail
    raise QuantityError(
        f"got {what_came(value)}, expected two rails such as '±12 V' or ['-5 V', '12 V']", key=key
    )


def show(value: float, unit: str, digits: int = 4) -> str:
    """A quantity in SI units for people, rounded to `digits` significant digits.

    >>> show(10200.0, "ohm"), show(-3.0103, "dB"), show(0.01, "%"), show(1e7, "V/us")
    ('10.2 kohm', '-3.01 dB', '1 %', '10 V/us')
    """
    name = "" if unit == "ratio" else f" {unit}"
    if not math.isfinite(value):
        return f"{value}{name}"
    factor = {"%": 100.0, "V/us": 1e-6, "ppm/K": 1e6}.get(unit, 1.0)
    rounded = Decimal(f"{value * factor:.{digits - 1}e}")
    if rounded == 0:
        return f"0{name}"
    prefixes = {0: ""}
    if unit != "V/us":
        prefixes |= {_PREFIXES[p]: p for p in _KINDS[unit].prefixes if p != "K"}
    exponent = max((e for e in prefixes if e <= rounded.adjusted()), default=min(prefixes))
    mantissa = rounded.scaleb(-exponent).normalize()
    if not -5 <= mantissa.adjusted() <= 6:
        return f"{rounded.normalize():e}{name}"
    return f"{mantissa:f}{name[:1]}{prefixes[exponent]}{name[1:]}"


def show_share(ratio: float) -> str:
    """A share in percent, to a hundredth; finer where that would make all or nothing of it.

    >>> show_share(0.9996), show_share(1.0), show_share(0.9999968), show_share(0.5)
    ('99.96 %', '100 %', '99.9997 %', '50.00 %')
    """
    if not math.isfinite(ratio) or ratio in (0.0, 1.0):
        return f"{100 * ratio:g} %"
    shown = (f"{100 * ratio:.{decimals}f}" for decimals in range(2, 15))
    text = next((t for t in shown if float(t) not in (0.0, 100.0)), f"{100 * ratio:g}")
    return f"{text} %"


def marking(value: float, kind: str) -> str:
    """The code on a part as IEC 60062 writes it: the letter stands for the decimal point.

    Below one, no zero comes before the letter (``R47``); a single digit is followed by a zero
    (``1K0``, ``1n0``; from memory).

    Parameters
    ----------
    value
        Resistance [ohm] or capacitance [F] of at most four significant digits.
    kind
        ``"resistor"`` or ``"capacitor"``.

    Raises
    ------
    QuantityError
        Not a positive value of at most four digits.

    Examples
    --------
    >>> marking(4990.0, "resistor"), marking(0.47, "resistor"), marking(2.2e-9, "capacitor")
    ('4K99', 'R47', '2n2')
    """
    letters = _LETTERS[kind]
    rounded = Decimal(f"{value:.3e}")
    if not (0 < value < math.inf and math.isclose(float(rounded), value, rel_tol=1e-9)):
        raise QuantityError(f"got {value}, expected a {kind} value of at most four digits")
    exponent = max((e for e in letters if e <= rounded.adjusted()), default=min(letters))
    whole, _, decimals = f"{rounded.scaleb(-exponent).normalize():f}".partition(".")
    whole = whole if whole != "0" else ""
    if len(whole + decimals) == 1:
        decimals += "0"
    return f"{whole}{letters[exponent]}{decimals}"


def tolerance_letter(tolerance: float) -> str:
    """The letter of IEC 60062 for a symmetric tolerance given as a ratio, ``""`` without one.

    The letters are from memory.

    >>> tolerance_letter(0.01), tolerance_letter(0.05), tolerance_letter(0.03)
    ('F', 'J', '')
    """
    for letter, percent in _TOLERANCES.items():
        if math.isclose(tolerance, percent / 100, rel_tol=1e-9):
            return letter
    return ""


def what_came(value: object) -> str:
    """A value in a message: short, on one line, in the words of the job file."""
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, (list, tuple)):
        return f"a list of {len(value)}"
    if isinstance(value, int) and value.bit_length() > 200:
        return "a number of many digits"
    text = str(value).lower() if isinstance(value, bool) else str(value)
    text = text if len(text) <= 60 else text[:57] + "..."
    return repr(text) if isinstance(value, str) else text


def _plain_value(value: object) -> Fraction | None:
    """A finite number as it is, None for anything else."""
    if isinstance(value, bool):
        return None
    if isinstance(value, Decimal):
        # The exponent is checked first: 1e999999999 must not be written out.
        if value == 0:
            return Fraction(0)
        small = value.is_finite() and abs(value.adjusted()) < 400
        return Fraction(value) if small and len(value.as_tuple().digits) < 1000 else None
    if isinstance(value, int):
        return Fraction(value) if value.bit_length() < 1000 else None
    if isinstance(value, float):
        return Fraction(value) if math.isfinite(value) else None
    return value if isinstance(value, Fraction) else None


def _text_value(
    value: str, kind: _Quantity, unit: str, *, signed: bool, refuse: Callable[[str], QuantityError]
) -> Fraction | None:
    """The number a text stands for in SI units, None when it is no such quantity."""
    text = value.strip().translate(_SAME).replace("√Hz", "rtHz").replace("sqrt(Hz)", "rtHz")
    if len(text) > _LONGEST:
        return None
    number = _NUMBER.fullmatch(text)
    scale: Fraction | None = None
    if number:
        sign, digits, exponent, suffix = number.groups()
        scale = _scale(suffix, kind)
        if unit == "ratio" and suffix == "dB":
            level = float(f"{sign}{digits}{exponent or ''}")
            if sign and not signed:
                raise refuse(" with a sign")
            return Fraction(10.0 ** (level / 20)) if abs(level) < 5000 else None
    if scale is None and (marked := _MARKED.fullmatch(text)):
        sign, whole, letter, decimals, suffix = marked.groups()
        digits, exponent = f"{whole or '0'}.{decimals}", ""
        scale = Fraction(1) if letter == kind.point else _prefix(letter, kind)
        if scale is not None and suffix and suffix not in kind.spellings:
            raise refuse(" with two suffixes")
    if scale is None:
        return None
    if sign and not signed:
        raise refuse(" with a sign")
    return Fraction(f"{sign}{digits}{exponent or ''}") * scale


def _prefix(text: str, kind: _Quantity) -> Fraction | None:
    """The factor a prefix stands for with this unit, None when it is not in use with it."""
    letter = "M" if text in ("meg", "Meg", "MEG") else text
    if len(letter) != 1 or letter not in kind.prefixes:
        return None
    return Fraction(10) ** _PREFIXES[letter]


def _scale(suffix: str, kind: _Quantity) -> Fraction | None:
    """The factor to SI of what follows the number: a unit, a prefix, or both."""
    if not suffix:
        return Fraction(1)
    if suffix in kind.spellings:
        return kind.spellings[suffix]
    for spelling, scale in (*kind.spellings.items(), ("", Fraction(1))):
        if suffix.endswith(spelling) and spelling != "R":  # R is the unit itself: 4R7, 470R
            factor = _prefix(suffix.removesuffix(spelling), kind)
            if factor is not None:
                return factor * scale
    return None
