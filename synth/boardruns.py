"""What a run of boards found: how many pass, how far the others go, and what drives it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.evidence import WorstBoard

__all__ = ["Driver", "Failures", "LimitFailures", "ToleranceResult"]

Real = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class LimitFailures:
    """The boards that fail at one limit first.

    Parameters
    ----------
    quantity
        ``"magnitude"`` or ``"phase"``.
    boards
        How many boards miss this limit by more, in shares of the limit, than the other.
    frequency_hz, low_hz, high_hz
        Where their error is the largest: median, 5th and 95th percentile over these boards [Hz];
        None without any.
    """

    quantity: str
    boards: int
    frequency_hz: float | None = None
    low_hz: float | None = None
    high_hz: float | None = None


@dataclass(frozen=True, kw_only=True)
class Failures:
    """The boards of a run that miss a limit.

    Were the deviations of a board to grow from nothing in proportion, the limit it reaches first,
    to first order, is the one of which its error is the largest share; `first` counts by these,
    the most frequent first.  `both` counts boards beyond both limits.
    """

    boards: int
    both: int
    first: tuple[LimitFailures, ...]


@dataclass(frozen=True, kw_only=True)
class Driver:
    """A part whose deviation drives the error of the boards.

    Parameters
    ----------
    refs
        One resistor or capacitor, or the op-amps of one package.
    kind
        ``"resistor"``, ``"capacitor"`` or ``"op_amp"``.
    share
        Squared correlation, over all boards, of its deviation with the error where boards fail: a
        ratio, the share of the variance that a straight line in this part explains.  Those of
        independent parts add up to at most about 1.
    """

    refs: tuple[str, ...]
    kind: str
    share: float


@dataclass(frozen=True, kw_only=True)
class ToleranceResult:
    """A run of boards with parts drawn within their tolerance.

    Parameters
    ----------
    boards, passed
        How many were drawn, and how many meet both limits over the band.
    low, high
        Clopper-Pearson interval of the yield at `confidence`, ratios.
    frequency_hz
        Shape (F,) [Hz].
    magnitude_5, magnitude_95, phase_5, phase_95
        Percentiles over the boards of the signed error at each frequency, shape (F,)
        [dB], [deg].
    error_95_db
        95th percentile over the boards of the largest absolute dB error over the band.
    seed
        Of the random generator.
    failures
        Which limit fails first, and where; None where that was not counted.
    drivers
        The parts that drive the error, by falling share; none with too few boards to tell.
    worst
        The boards farthest from the target, the worst first; empty where nobody kept them.
    unstable
        How many are unstable by themselves where H(s) is not; none of them passes.
    """

    boards: int
    passed: int
    low: float
    high: float
    confidence: float
    frequency_hz: Real
    magnitude_5: Real
    magnitude_95: Real
    phase_5: Real
    phase_95: Real
    error_95_db: float
    seed: int
    failures: Failures | None = None
    drivers: tuple[Driver, ...] = ()
    worst: tuple[WorstBoard, ...] = ()
    unstable: int = 0

    @property
    def share(self) -> float:
        """Share of the boards that pass, a ratio."""
        return self.passed / self.boards
