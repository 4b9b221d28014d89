"""What it brings to choose values for the op-amps there are, and how long that holds.

Finite gain-bandwidth and open-loop gain bend a response; values chosen against the circuit
with these op-amps make up for it.  Beside them stand values chosen the same way, same seed and
effort, as if op-amps were ideal, both judged on the circuit with the job's op-amps; and the
chosen values once more with every gain-bandwidth off by half, as the figure of a real part
may be.  The search with op-amps then also works on from the values found without, half as long
again.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit
from synth.evidence import response_error
from synth.nodal import compile_circuit
from synth.results import ErrorFigures, OpAmpAllowance

__all__ = ["GAIN_BANDWIDTH_OFF", "op_amp_allowance"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# How far the gain-bandwidth of a part may be from its typical figure: a common spread between
# parts, supplies and temperatures (common practice).
GAIN_BANDWIDTH_OFF = 0.5


def op_amp_allowance(
    chosen: Circuit, without: Circuit, target: Complex, frequency_hz: Real
) -> OpAmpAllowance:
    """Errors with and without an allowance for the op-amps.

    Parameters
    ----------
    chosen
        The circuit with the job's op-amps and values chosen for them.
    without
        The same with values chosen for ideal op-amps; its own op-amps do not matter.
    target
        What the output must show, shape (F,).
    frequency_hz
        Shape (F,) [Hz].
    """
    program = compile_circuit(chosen)
    usual = np.array([a.figures.gain_bandwidth for a in chosen.amplifiers])
    unaware = compile_circuit(replace(without, amplifiers=chosen.amplifiers))

    def off(factor: float) -> ErrorFigures:
        response = program.solve(frequency_hz, gain_bandwidth=factor * usual)
        return ErrorFigures.of(response_error(response, target))

    return OpAmpAllowance(
        with_allowance=ErrorFigures.of(response_error(program.solve(frequency_hz), target)),
        without_allowance=ErrorFigures.of(response_error(unaware.solve(frequency_hz), target)),
        slower_factor=1 - GAIN_BANDWIDTH_OFF,
        slower=off(1 - GAIN_BANDWIDTH_OFF),
        faster_factor=1 + GAIN_BANDWIDTH_OFF,
        faster=off(1 + GAIN_BANDWIDTH_OFF),
    )
