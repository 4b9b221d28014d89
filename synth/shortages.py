"""Values that cannot be had, and what a design without them changed: plain values."""

from __future__ import annotations

import math
from dataclasses import dataclass

from synth.circuit import Circuit, Passive
from synth.evidence import ResponseError
from synth.quantities import show

__all__ = ["Change", "Repick", "Shortage", "changes_between"]

SAME_VALUE = 1e-9
"""Two values of a part are the same within this ratio; far below the step of any series."""


FALL_TOLD = 0.01
"""A yield that falls by more than this share of the boards is told: less is hardly more than two
runs of some thousand boards differ by."""


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


def changes_between(old: Circuit, new: Circuit) -> tuple[Change, ...]:
    """The parts with another value in `new`, the same circuit, in circuit order."""
    return tuple(
        Change(ref=p.ref, kind=p.kind, before=p.value, after=q.value, sets=p.sets)
        for p, q in zip(old.passives, new.passives, strict=True)
        if p.value != q.value
    )


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
    share_before, share_after
        Share of the boards within both limits, ratios: that of the earlier design as recorded,
        None where it is not known, and that of this one, from as many boards with the same seed.
    """

    asked: tuple[Shortage, ...]
    earlier: tuple[Shortage, ...]
    bought: tuple[str, ...]
    all_free: bool
    missing: tuple[str, ...]
    changes: tuple[Change, ...]
    before: ResponseError
    after: ResponseError
    share_before: float | None
    share_after: float

    @property
    def notices(self) -> tuple[str, ...]:
        """What is said of a yield that falls by more than `FALL_TOLD`, one sentence."""
        if self.share_before is None or self.share_after > self.share_before - FALL_TOLD:
            return ()
        shares = (self.share_before, self.share_after)
        before, after = (f"{100 * share:.4g} %" for share in shares)
        return (f"the yield falls from {before} of the boards to {after}",)
