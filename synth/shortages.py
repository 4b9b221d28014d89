"""Values that cannot be had, and what a design without them changed: plain values."""

from __future__ import annotations

import math
from dataclasses import dataclass

from synth.circuit import Passive
from synth.evidence import ResponseError
from synth.quantities import show

__all__ = ["Change", "Repick", "Shortage"]

SAME_VALUE = 1e-9
"""Two values of a part are the same within this ratio; far below the step of any series."""


@dataclass(frozen=True, kw_only=True)
class Shortage:
    """A value that is out of stock.

    Parameters
    ----------
    kind
        ``"resistor"`` or ``"capacitor"``.
    value
        [ohm] or [F].
    ref
        The one part that cannot have it, or ``""`` for all of its kind.
    source
        Of all: those whose values come from this series, or ``"stock"``; ``""`` for any.
    """

    kind: str
    value: float
    ref: str = ""
    source: str = ""

    def concerns(self, part: Passive) -> bool:
        """Whether it keeps `part` from having the value."""
        if part.rule is None or part.kind != self.kind:
            return False
        if self.ref:
            return part.ref == self.ref
        return self.source in ("", part.rule.source)

    def hits(self, part: Passive) -> bool:
        """Whether `part` has the value and cannot."""
        return self.concerns(part) and self.is_value(part.value)

    def is_value(self, value: float) -> bool:
        """Whether it is about `value`."""
        return math.isclose(value, self.value, rel_tol=SAME_VALUE)

    @property
    def text(self) -> str:
        """As it is asked for: ``"R7=11.3 kohm"``, ``"E96 11.3 kohm"``."""
        value = show(self.value, "ohm" if self.kind == "resistor" else "F", 6)
        if self.ref:
            return f"{self.ref}={value}"
        return f"{self.source} {value}" if self.source else value


@dataclass(frozen=True, kw_only=True)
class Change:
    """A part with another value: `before` and `after` [ohm] or [F], and what it sets."""

    ref: str
    kind: str
    before: float
    after: float
    sets: str = ""


@dataclass(frozen=True, kw_only=True, eq=False)
class Repick:
    """What a design without some values changed.

    Parameters
    ----------
    asked
        The values that cannot be had.
    earlier
        Those the earlier design already had to do without.
    bought
        References that were not to change.
    all_free
        Whether every other part was free from the start.
    missing
        References of the parts that had to change.
    changes
        The parts with another value, in circuit order.
    before, after
        Error of the nominal circuit over the band, with the values of the earlier design and
        with those of this one.
    """

    asked: tuple[Shortage, ...]
    earlier: tuple[Shortage, ...]
    bought: tuple[str, ...]
    all_free: bool
    missing: tuple[str, ...]
    changes: tuple[Change, ...]
    before: ResponseError
    after: ResponseError
