"""What ``--without`` and ``--bought`` say: texts to values.

``R7=11k3`` is a value that one part cannot have, ``E96 11k3`` one that no part of a series (or
of the ``stock``) can have, ``11k3`` one that no part of its kind can have.
"""

from __future__ import annotations

from collections.abc import Mapping

from synth.errors import JobError, QuantityError
from synth.preferred import SERIES
from synth.quantities import parse, what_came
from synth.shortages import Shortage

__all__ = ["read_references", "read_shortage"]

UNITS = {"resistor": "ohm", "capacitor": "F"}
SOURCES = {name.casefold(): name for name in (*SERIES, "stock")}
EXPECTED = "expected a text such as 'R7=11k3' or 'E96 11k3'"


def read_shortage(text: str, kinds: Mapping[str, str], *, key: str = "--without") -> Shortage:
    """The value a text says cannot be had.

    Parameters
    ----------
    kinds
        Kind of each part by its reference: whether ``R7=4700`` is a resistance.

    Raises
    ------
    JobError
        Neither form, a reference or series that does not exist, a value that cannot be read.

    Examples
    --------
    >>> read_shortage("R7=11k3", {"R7": "resistor"})
    Shortage(kind='resistor', value=11300.0, ref='R7', source='')
    >>> read_shortage("e12 10 nF", {}).source
    'E12'
    """
    ref, equals, value = (part.strip() for part in text.partition("="))
    if equals:
        ref = ref.upper()
        if ref not in kinds:
            known = ", ".join(kinds)
            raise JobError(f"got the part {what_came(ref)}, expected one of {known}", key=key)
        unit = UNITS[kinds[ref]]
        return Shortage(kind=kinds[ref], value=_positive(value, unit, key=key), ref=ref)
    if ref.upper() in kinds:
        raise JobError(f"got {what_came(text)} without a value, {EXPECTED}", key=key)
    first, _, rest = text.strip().partition(" ")
    source = SOURCES.get(first.casefold(), "")
    if not source:
        rest = text
        if first[:1].casefold() == "e" and first[1:].isdigit():
            raise JobError(
                f"got the series {what_came(first)}, expected one of {', '.join(SERIES)}", key=key
            )
    for kind, unit in UNITS.items():
        try:
            return Shortage(kind=kind, value=_positive(rest, unit, key=key), source=source)
        except QuantityError:
            continue
    raise JobError(f"got {what_came(text)}, {EXPECTED}", key=key)


def read_references(text: str) -> tuple[str, ...]:
    """References between spaces or commas.

    >>> read_references("R1, r2 C3")
    ('R1', 'R2', 'C3')
    """
    return tuple(dict.fromkeys(text.replace(",", " ").upper().split()))


def _positive(text: str, unit: str, *, key: str) -> float:
    value = parse(text, unit, key=key)
    if value == 0:
        raise JobError(f"got {what_came(text)}, expected a value above zero", key=key)
    return value
