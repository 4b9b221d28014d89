"""What was measured: responses, checks and verdicts, as plain values.

Errors of a response H against a target T are of ln(H/T): its real part in dB is the magnitude
error, its imaginary part in degrees, taken modulo 360, the phase error.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Check", "ResponseError", "WorstBoard", "response_error", "verdict"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

DB_PER_NEPER = 20 / math.log(10)


@dataclass(frozen=True)
class Check:
    """One line of the verdict.

    Parameters
    ----------
    name
        What is checked.
    limit, value
        In `unit`; None for no limit or no value.
    unit
        ``"dB"``, ``"deg"``, ``"V"``, ``"V/us"``, ``"%"``, ...
    passed
        True without a limit.
    note
        Where it happens, or what to know, short.
    """

    name: str
    limit: float | None
    value: float | None
    unit: str
    passed: bool
    note: str = ""

    @classmethod
    def at_most(
        cls, name: str, value: float, limit: float | None, unit: str, note: str = ""
    ) -> Check:
        """Passes when value <= limit, or without a limit; a value that is no number fails."""
        passed = limit is None or value <= limit
        shown = value if math.isfinite(value) else None
        return cls(name, limit, shown, unit, passed, note)

    @classmethod
    def at_least(
        cls, name: str, value: float, limit: float | None, unit: str, note: str = ""
    ) -> Check:
        """Passes when value >= limit, or without a limit; a value that is no number fails."""
        passed = limit is None or value >= limit
        shown = value if math.isfinite(value) else None
        return cls(name, limit, shown, unit, passed, note)


@dataclass(frozen=True)
class ResponseError:
    """Error of a response over frequency, shapes (..., frequencies)."""

    magnitude_db: Real
    phase_deg: Real

    @property
    def rms(self) -> float:
        """Root mean square of |ln(H/T)| over everything, a plain ratio."""
        ln = self.magnitude_db / DB_PER_NEPER
        rad = np.radians(self.phase_deg)
        return float(np.sqrt(np.mean(ln**2 + rad**2)))

    @property
    def largest_db(self) -> float:
        """Largest magnitude error, absolute [dB]."""
        return float(np.max(np.abs(self.magnitude_db)))

    @property
    def largest_deg(self) -> float:
        """Largest phase error, absolute [deg]."""
        return float(np.max(np.abs(self.phase_deg)))


@dataclass(frozen=True, kw_only=True)
class WorstBoard:
    """A board of a run that comes out far from the target.

    `number` counts from 0 in the run; `limit_share` is its largest error over the band as a
    share of the limit, of magnitude or phase, whichever is more; `values` are those of the
    passives in circuit order [ohm], [F], `gain_bandwidth` those of the op-amps in circuit order
    [Hz]; None where all have their figure.
    """

    number: int
    limit_share: float
    values: tuple[float, ...]
    gain_bandwidth: tuple[float, ...] | None = None


def response_error(response: Complex, target: Complex) -> ResponseError:
    """Error of `response` against `target`, shapes that broadcast; the phase within +-180 deg."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = response / target
        return ResponseError(20 * np.log10(np.abs(ratio)), np.degrees(np.angle(ratio)))


def verdict(checks: tuple[Check, ...], *, verified: bool) -> str:
    """``"unverified"`` without a simulation, else ``"pass"`` or ``"fail"``."""
    if not verified:
        return "unverified"
    return "pass" if all(c.passed for c in checks) else "fail"
