"""Noise at the output over the band, and how far above it the largest signal stands."""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit
from synth.nodal import compile_circuit
from synth.results import NoiseResult, Swing

__all__ = ["dynamic_range_db", "output_noise"]

Real = NDArray[np.float64]


def output_noise(circuit: Circuit, frequency_hz: Real) -> NoiseResult:
    """Density, total and shares of the noise at the output, over `frequency_hz` (F,) [Hz],
    ascending; the total by the trapezoidal rule."""
    found = compile_circuit(circuit).noise(frequency_hz)
    power = float(np.trapezoid(found.total, frequency_hz))
    shares = np.asarray(np.trapezoid(found.power, frequency_hz, axis=0) / power)
    return NoiseResult(
        frequency_hz=frequency_hz,
        density=found.density,
        output_rms=float(np.sqrt(power)),
        shares=dict(zip(found.refs, shares.tolist(), strict=True)),
    )


def dynamic_range_db(swings: Iterable[Swing], output_net: str, noise_rms: float) -> float:
    """Largest sine the output shows before any op-amp output meets its limit, rms, over the
    noise in the band [dB].

    The input is raised until the first output is at its limit; each is taken at the frequency
    of its own peak, so that the output may be anywhere within the band.
    """
    found = tuple(swings)
    room = min(s.peak_limit / s.peak for s in found)
    (output,) = (s.peak for s in found if s.net == output_net)
    return 20 * math.log10(room * output / math.sqrt(2) / noise_rms)
