"""How each kind of value in a job file is read, from what TOML gives to what `synth` takes.

Every reader takes one value and raises `JobError` with what came and what was expected; the
key path is added by `netlist.jobfile`.  Coefficients and frequencies of roots stay exact.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable, Iterable, Mapping
from fractions import Fraction
from typing import TypeVar

from synth.errors import JobError
from synth.quantities import marking, parse, parse_exact, parse_rails, what_came

__all__ = [
    "RootEntry",
    "read_band",
    "read_coefficients",
    "read_expression",
    "read_file_name",
    "read_fixed",
    "read_gain",
    "read_gain_at",
    "read_parameters",
    "read_part_value",
    "read_quantity",
    "read_rails",
    "read_references",
    "read_roots",
    "read_switch",
    "read_table",
    "read_temperatures",
    "read_text",
    "unknown_key",
]

LONGEST_TEXT = 200  # characters of a title or a name
MOST_ENTRIES = 33  # of a list: far above any order that can be built, few enough to be fast

_FIXABLE = re.compile(r"[RC][1-9][0-9]{0,4}")

T = TypeVar("T")
RootEntry = tuple[Fraction, Fraction | float | None]
"""Frequency [Hz], its sign telling the half-plane, and the q of a pair (None: a real root)."""


def read_quantity(unit: str) -> Callable[[object], float]:
    """A reader of quantities of one unit, such as ``"ohm"``."""
    return lambda value: parse(value, unit)


def read_text(value: object) -> str:
    """A short text on one line."""
    if not isinstance(value, str):
        raise JobError(f"got {what_came(value)}, expected a text in quotes")
    if len(value) > LONGEST_TEXT:
        raise JobError(f"got {len(value)} characters, expected at most {LONGEST_TEXT}")
    if not value.isprintable():
        raise JobError(f"got {what_came(value)}, expected one line without control characters")
    return value


def read_texts(value: object) -> tuple[str, ...]:
    """A list of short texts."""
    if not isinstance(value, list):
        raise JobError(f"got {what_came(value)}, expected a list of texts in quotes")
    return tuple(read_text(each) for each in value)


def read_file_name(value: object) -> str:
    """The name of a file beside the job."""
    name = read_text(value)
    if not name.strip():
        raise JobError(
            f"got {what_came(value)}, expected the name of a file; leave the key out where there "
            "is none"
        )
    return name


def read_expression(value: object) -> str:
    """An expression on one line, each character in its place so that a caret can point at it."""
    if not isinstance(value, str):
        raise JobError(f"got {what_came(value)}, expected an expression in quotes")
    return "".join(c if c.isprintable() else " " for c in value)


def read_switch(value: object) -> bool:
    """True or false."""
    if not isinstance(value, bool):
        raise JobError(f"got {what_came(value)}, expected true or false")
    return value


def read_rails(value: object) -> tuple[float, float]:
    """The negative and the positive rail [V]."""
    return parse_rails(value)


def read_band(value: object) -> tuple[float, float]:
    """The lowest and the highest frequency [Hz]."""
    if not isinstance(value, list) or len(value) != 2:
        raise JobError(
            f"got {what_came(value)}, expected the lowest and the highest frequency "
            "such as ['1 Hz', '20 kHz']"
        )
    low, high = (parse(v, "Hz") for v in value)
    return low, high


def read_temperatures(value: object) -> tuple[float, float]:
    """The lowest and the highest temperature [deg C]."""
    if not isinstance(value, list) or len(value) != 2:
        raise JobError(
            f"got {what_came(value)}, expected the lowest and the highest temperature "
            "such as ['0 degC', '60 degC']"
        )
    low, high = (parse(v, "degC", signed=True) for v in value)
    return low, high


def read_references(value: object) -> tuple[str, ...]:
    """References of parts; that they make sense together is checked by `synth.population`."""
    return _entries(value, read_text, "references such as ['R3', 'R4']")


def read_gain(value: object) -> Fraction:
    """A gain with its sign: a plain ratio or a level in dB."""
    return parse_exact(value, "ratio", signed=True)


def read_gain_at(value: object) -> Fraction | str:
    """A frequency [Hz], ``"dc"`` or ``"inf"``."""
    if value in ("dc", "inf", math.inf):
        return "dc" if value == "dc" else "inf"
    try:
        return parse_exact(value, "Hz") or "dc"
    except JobError as error:
        raise JobError(f"{error.problem}, 'dc' or 'inf'") from None


def read_coefficients(value: object) -> tuple[Fraction, ...]:
    """Coefficients of a polynomial, descending powers of s."""
    return _entries(value, _number, "coefficients, descending powers of s")


def read_roots(value: object) -> tuple[RootEntry, ...]:
    """Zeros or poles; an empty list is none."""
    return _entries(value, _root, "frequencies", least=0)


def read_parameters(value: object) -> dict[str, Fraction | str]:
    """Parameters of an expression: numbers, or expressions as text."""
    if not isinstance(value, Mapping):
        raise JobError(f"got {what_came(value)}, expected a table of parameters")
    out: dict[str, Fraction | str] = {}
    for name, item in value.items():
        try:
            out[name] = read_expression(item) if isinstance(item, str) else _number(item)
        except JobError as error:
            raise JobError(f"{what_came(name)}: {error.problem} or an expression") from None
    return out


def read_table(value: object) -> Mapping[str, object]:
    """A table whose keys are names of the user's own."""
    if not isinstance(value, Mapping):
        raise JobError(f"got {what_came(value)}, expected a table such as {{C1 = '10 nF'}}")
    return value


def read_part_value(value: object, kind: str) -> float:
    """A resistance [ohm] or a capacitance [F] a part can have: positive, of at most four digits,
    as many as a part is marked with."""
    number = parse(value, "ohm" if kind == "resistor" else "F")
    if number == 0:
        raise JobError(f"got {what_came(value)}, expected a value above 0")
    try:
        marking(number, kind)
    except JobError:
        raise JobError(f"got {what_came(value)}, expected at most four digits") from None
    return number


def read_fixed(ref: str, value: object) -> tuple[str, float]:
    """A reference and the value of its part: ohm behind an R, farad behind a C."""
    if not _FIXABLE.fullmatch(ref):
        raise JobError(f"got the reference {what_came(ref)}, expected one such as 'R3' or 'C1'")
    return ref, read_part_value(value, "resistor" if ref.startswith("R") else "capacitor")


def unknown_key(name: str, known: Iterable[str], *, elsewhere: Iterable[str] = ()) -> str:
    """What to say of a key that does not exist: the nearest that does, or all there are.

    `elsewhere` are key paths of other tables, one of which may be where the key belongs.
    """
    names = sorted(known)
    near = difflib.get_close_matches(name, names, n=1)
    near = near or [path for path in elsewhere if path.rpartition(".")[2] == name]
    if near:
        return f"unknown key {what_came(name)}; did you mean {near[0]!r}?"
    return f"unknown key {what_came(name)}, expected one of {', '.join(names)}"


def _entries(
    value: object, read: Callable[[object], T], what: str, *, least: int = 1
) -> tuple[T, ...]:
    """A list of what `read` reads; the message counts the entries from 1."""
    if not isinstance(value, list) or len(value) < least:
        raise JobError(f"got {what_came(value)}, expected a list of {what}")
    if len(value) > MOST_ENTRIES:
        raise JobError(f"got {len(value)} entries, expected at most {MOST_ENTRIES}")
    out: list[T] = []
    for position, item in enumerate(value, start=1):
        try:
            out.append(read(item))
        except JobError as error:
            raise JobError(f"entry {position}: {error.problem}") from None
    return tuple(out)


def _number(value: object) -> Fraction:
    """A finite number, exact."""
    if not isinstance(value, str):
        try:
            return parse_exact(value, "ratio", signed=True)
        except JobError:
            pass
    raise JobError(f"got {what_came(value)}, expected a finite number")


def _root(value: object) -> RootEntry:
    """A frequency, or a table with frequency and q."""
    if not isinstance(value, Mapping):
        return parse_exact(value, "Hz", signed=True), None
    for name in value:
        if name not in ("frequency", "q"):
            raise JobError(unknown_key(name, ("frequency", "q")))
    if "frequency" not in value:
        raise JobError("got no frequency, expected a table such as {frequency = '1 kHz', q = 2}")
    frequency = parse_exact(value["frequency"], "Hz", signed=True)
    if "q" not in value:
        return frequency, None
    if frequency == 0:
        raise JobError("got a q at a frequency of 0, expected a frequency that is not 0, or no q")
    return frequency, _quality(value["q"])


def _quality(value: object) -> Fraction | float:
    """The q of a pair: positive, infinite for a pair on the imaginary axis."""
    if value in ("inf", math.inf):
        return math.inf
    try:
        q = parse_exact(value, "ratio")
    except JobError:
        q = Fraction(0)
    if q == 0:
        raise JobError(
            f"got q = {what_came(value)}, expected a positive number or inf "
            "(a negative frequency puts a pair into the right half-plane)"
        )
    return q
