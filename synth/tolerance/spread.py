"""First-order spread of a response from part tolerance.

ln H is nearly linear in the ln of the parts, so its variance is the sum over parts of sensitivity
squared times the variance of the part.  A part is uniform within its tolerance, as in a run of
boards, and its standard deviation is tolerance / sqrt(3).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.errors import CircuitError
from synth.evidence import DB_PER_NEPER
from synth.nodal import Sensitivities

__all__ = ["Spread", "predicted_spread"]

Real = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Spread:
    """One standard deviation of the magnitude [dB] and the phase [deg], shapes (F,)."""

    magnitude_db: Real
    phase_deg: Real


def predicted_spread(sensitivities: Sensitivities, tolerances: ArrayLike) -> Spread:
    """Spread of the response over frequency; `tolerances` in order of ``sensitivities.refs``,
    ratios, shape (P,), 0 for what has none.

    Raises
    ------
    CircuitError
        As many tolerances as there are parts were expected.
    """
    tolerance = np.asarray(tolerances, dtype=float)
    if tolerance.shape != (len(sensitivities.refs),):
        raise CircuitError(
            f"got tolerances of shape {tolerance.shape}, expected ({len(sensitivities.refs)},)"
        )
    variance = tolerance**2 / 3
    by_part = sensitivities.passives
    return Spread(
        magnitude_db=DB_PER_NEPER * np.sqrt(by_part.real**2 @ variance),
        phase_deg=np.degrees(np.sqrt(by_part.imag**2 @ variance)),
    )
