"""The worst case of a board, as plain values."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["MEET", "WorstCase", "WorstError"]

MEET = 0.05
"""Reached and bound are said to meet where the bound is at most this much higher, relative."""


@dataclass(frozen=True, kw_only=True)
class WorstError:
    """The largest error of any board with every part within its tolerance.

    Parameters
    ----------
    unit
        ``"dB"`` or ``"deg"``.
    reached
        Size of the error of the board below.
    sign
        Of that error, +1 or -1.
    bound
        No board has an error of larger size; None where no bound was found or none exists.
    everywhere
        The same at every frequency from the lowest to the highest, those between the ones at
        which errors are taken included; None where no such bound was found or none exists.
    unlimited
        Empty, or why no bound exists, which is then proven: ``"pole"``, the response grows without
        limit towards a board within tolerance, at one of the frequencies; ``"zero"``, it vanishes
        towards one.
    frequency_hz
        Where it is reached [Hz].
    values
        Value of each part with a tolerance on that board [ohm], [F], by reference.
    low, high, between
        References of the parts that stand at the lower end of their tolerance, at the upper end,
        and between.
    """

    unit: str
    reached: float
    sign: int
    bound: float | None
    frequency_hz: float
    values: dict[str, float]
    low: tuple[str, ...]
    high: tuple[str, ...]
    between: tuple[str, ...]
    everywhere: float | None = None
    unlimited: str = ""

    def __post_init__(self) -> None:
        if self.sign not in (1, -1) or not self.reached >= 0:
            raise ValueError(f"got {self.reached} of sign {self.sign}, expected a size and a sign")
        if self.bound is not None and not self.reached <= self.bound:
            raise ValueError(f"got the bound {self.bound}, expected {self.reached} or more")
        if self.unlimited not in ("", "pole", "zero") or (
            self.unlimited and self.bound is not None
        ):
            raise ValueError(f"got {self.unlimited!r} and the bound {self.bound}, expected one")

    @property
    def meets(self) -> bool:
        """Whether bound and reached are within `MEET` of each other."""
        return self.bound is not None and self.bound <= (1 + MEET) * self.reached


@dataclass(frozen=True, kw_only=True)
class WorstCase:
    """Worst errors of magnitude and phase over all boards within tolerance, op-amps as stated.

    `frequencies` is the number of frequencies at which the errors are taken, `boxes` how many
    boxes of parts were enclosed for the bounds.
    """

    magnitude_db: WorstError
    phase_deg: WorstError
    frequencies: int
    boxes: int
