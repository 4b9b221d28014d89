"""The smallest gain-bandwidth of the op-amps with which the nominal board keeps its limits.

The chosen values make up for the op-amps of the job, so the error grows both ways from there:
what is asked for is how much slower all op-amps together may be before a limit is missed, or
how much faster they must be where it is missed already.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit
from synth.evidence import response_error
from synth.job import Accept
from synth.nodal import compile_circuit
from synth.stability import poles_on_the_right, right_of_target
from synth.transfer import TransferFunction

__all__ = ["gain_bandwidth_needed"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# How far below and above the figure of the job it is looked for, as factors, and in how many
# steps; twice more between the two neighbours of the limit, which leaves a tenth of a percent.
SLOWEST = 1e-8
FASTEST = 1e4
STEPS = 61
REFINEMENTS = 2


def gain_bandwidth_needed(
    circuit: Circuit,
    target: Complex,
    frequency_hz: Real,
    *,
    accept: Accept,
    wanted: TransferFunction,
) -> float | None:
    """Smallest gain-bandwidth [Hz] from which up to that of the job both limits hold and the board
    is stable by itself; where it misses one, the smallest above it that mends this.

    Parameters
    ----------
    circuit
        With the chosen values and the op-amps of the job, all of one kind.
    target
        What the output must show, shape (F,).
    frequency_hz
        Shape (F,) [Hz].
    wanted
        H(s), or -H(s): its poles.

    Returns
    -------
    None where no faster op-amp mends what is missed, or there is no op-amp.
    """
    if not circuit.amplifiers:
        return None
    program = compile_circuit(circuit)
    usual = np.array([a.figures.gain_bandwidth for a in circuit.amplifiers])

    def kept(factors: Real) -> NDArray[np.bool_]:
        """Whether both limits hold, and no pole is out of place, with every op-amp at each factor
        (N,) of its figure."""
        figures = np.outer(factors, usual)
        response = program.solve(frequency_hz, gain_bandwidth=figures)
        error = response_error(response, target)
        magnitude = np.max(np.abs(error.magnitude_db), axis=-1) <= accept.magnitude_db
        phase = np.max(np.abs(error.phase_deg), axis=-1) <= accept.phase_deg
        right = poles_on_the_right(program.poles(gain_bandwidth=figures), wanted)
        return np.asarray(magnitude & phase & (right == right_of_target(wanted)))

    if kept(np.ones(1))[0]:
        factors = np.geomspace(1.0, SLOWEST, STEPS)
    else:
        factors = np.geomspace(FASTEST, 1.0, STEPS)
        held = np.flatnonzero(kept(factors))
        if held.size == 0:
            return None
        factors = factors[int(held[-1]) :]
    return _last_kept(factors, kept) * float(np.max(usual))


def _last_kept(factors: Real, kept: Callable[[Real], NDArray[np.bool_]]) -> float:
    """The last of descending factors before a limit is missed, refined between its neighbours;
    the first is known to hold."""
    for _ in range(REFINEMENTS + 1):
        held = kept(factors)
        if np.all(held):
            return float(factors[-1])
        first = max(int(np.argmin(held)), 1)
        factors = np.geomspace(factors[first - 1], factors[first], STEPS)
    return float(factors[0])
