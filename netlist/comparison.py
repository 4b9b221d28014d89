"""Simulated against target: the two checks that the verdict rests on.

Magnitude error in dB, phase error in degrees modulo 360; see `synth.evidence`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.errors import SimulationFailedError
from synth.evidence import Check, response_error
from synth.job import Accept

__all__ = ["compare"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def compare(
    frequency_hz: Real, simulated: Complex, target: Complex, accept: Accept
) -> tuple[Check, Check]:
    """The checks ``magnitude error`` and ``phase error``; each notes where it is largest.

    Parameters
    ----------
    frequency_hz, simulated, target
        Frequencies [Hz] and responses, shapes (F,), F at least 1.
    accept
        The limits.

    A response that is no number, or zero, anywhere fails both checks.
    """
    shapes = {np.shape(frequency_hz), np.shape(simulated), np.shape(target)}
    if len(shapes) != 1 or np.size(frequency_hz) == 0:
        raise SimulationFailedError(
            f"got responses of shapes {sorted(shapes)}, expected the same points in each"
        )
    error = response_error(simulated, target)
    # Where there is no response there is no phase either.
    phase = np.where(np.isfinite(error.magnitude_db), error.phase_deg, np.nan)
    return (
        _check("magnitude error", frequency_hz, error.magnitude_db, accept.magnitude_db, "dB"),
        _check("phase error", frequency_hz, phase, accept.phase_deg, "deg"),
    )


def _check(name: str, frequency_hz: Real, error: Real, limit: float, unit: str) -> Check:
    size = np.where(np.isfinite(error), np.abs(error), np.inf)
    worst = int(np.argmax(size))
    note = f"largest at {frequency_hz[worst]:.5g} Hz"
    return Check.at_most(name, float(size[worst]), limit, unit, note)
