"""Sensitivities of a response to every part from one forward and one transposed solve.

With M x = b the forward equations and M^T psi = c the transposed ones, c picking the net whose
voltage is H, a change dM gives dH = -psi^T dM x (Director and Rohrer 1969, "The generalized
adjoint network and network sensitivities"; from memory).  For a passive of admittance y between
nets p and q that is dH = -(psi_p - psi_q) (v_p - v_q) dy, for an op-amp dH = psi_k v_out da_k.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError
from synth.nodal.adjoint import Adjoint
from synth.nodal.structure import Structure

__all__ = ["Sensitivities", "sensitivities_from"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Sensitivities:
    """Relative sensitivities of the response of one net.

    Parameters
    ----------
    frequency_hz
        Shape (F,).
    response
        H of the observed net, shape (F,).
    refs, amplifiers
        References of passives (P) and op-amps (U), the columns below.
    passives
        d ln H / d ln value, complex, shape (F, P): the real part is the relative change of |H|,
        the imaginary part the change of phase [rad], each per relative change of the part.
    gain_bandwidth, open_loop_gain
        d ln H / d ln figure of every op-amp, shape (F, U).
    nets, voltages
        Responses of all op-amp outputs, names (U) and shape (F, U), from the same solve.
    """

    frequency_hz: Real
    response: Complex
    refs: tuple[str, ...]
    amplifiers: tuple[str, ...]
    passives: Complex
    gain_bandwidth: Complex
    open_loop_gain: Complex
    nets: tuple[str, ...]
    voltages: Complex


def sensitivities_from(
    structure: Structure,
    adjoint: Adjoint,
    column: int,
    *,
    frequency_hz: Real,
    y: Complex,
    gain_bandwidth: Real,
    open_loop_gain: Real,
) -> Sensitivities:
    """Relative sensitivities of net `column`; `y` [S] shape (F, P), figures shape (U,).

    Raises
    ------
    NumericalError
        The response is exactly 0 at a frequency, where ln H has no derivative.
    """
    v, psi = adjoint.voltages, adjoint.currents
    response = v[:, column]
    if not np.all(response):
        dead = frequency_hz[response == 0][0]
        raise NumericalError(
            f"net {structure.nets[column]!r} has no response at {dead:g} Hz, so its relative "
            "sensitivity does not exist there; leave the frequency out"
        )
    p, q = structure.ends[:, 0], structure.ends[:, 1]
    per_ln_y = -(psi[:, p] - psi[:, q]) * (v[:, p] - v[:, q]) * y / response[:, None]
    outputs = v[:, structure.pins[:, 2]]
    per_a = adjoint.amplifiers * outputs / response[:, None]
    s = np.asarray(2j * np.pi * frequency_hz[:, None], dtype=np.complex128)
    return Sensitivities(
        frequency_hz=frequency_hz,
        response=response,
        refs=structure.refs,
        amplifiers=structure.amplifiers,
        passives=np.where(structure.is_resistor, -per_ln_y, per_ln_y),
        gain_bandwidth=np.asarray(-per_a * s / (2 * np.pi * gain_bandwidth)),
        open_loop_gain=-per_a / open_loop_gain,
        nets=tuple(structure.nets[k] for k in structure.pins[:, 2]),
        voltages=outputs,
    )
