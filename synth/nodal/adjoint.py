"""Forward and transposed solutions together: all that derivatives and noise need.

Both are computed on the reduced equations; here the nets and op-amp rows that the reduction took
out are put back.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.nodal.reduction import Reduction
from synth.nodal.structure import Structure

__all__ = ["Adjoint", "all_voltages", "completed"]

Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Adjoint:
    """Forward and transposed solution over frequency.

    Parameters
    ----------
    voltages
        Of all nets, input and ground included, shape (F, n + 2).
    currents
        Voltage of the observed net per ampere drawn *out of* each net, shape (F, n + 2) [ohm];
        0 at nets a source or an op-amp drives.  This is psi of the current rows.
    amplifiers
        psi of the op-amp rows, shape (F, U): the observed net answers -psi_k e to a voltage e in
        series with the + input of op-amp k.
    """

    voltages: Complex
    currents: Complex
    amplifiers: Complex


def completed(
    structure: Structure,
    reduction: Reduction,
    observed: int,
    *,
    y: Complex,
    a: Complex,
    voltages: Complex,
    psi: Complex,
) -> Adjoint:
    """The whole solution from that of the reduced equations.

    Parameters
    ----------
    observed
        The net observed.
    y, a
        Admittances (F, P) [S] and inverse gains (F, U).
    voltages, psi
        In order of the reduction's columns and rows, shapes (F, columns), (F, rows).
    """
    outputs = structure.pins[:, 2]
    v = all_voltages(structure, reduction, voltages, a)
    currents = np.zeros_like(v)
    currents[:, list(reduction.rows)] = psi
    amplifiers = currents[:, outputs]
    currents[:, outputs] = 0.0
    if reduction.pairs:
        # The columns of the nets taken out, in M^T psi = c, give psi of the op-amps used.
        used, nets = (list(k) for k in zip(*reduction.pairs, strict=True))
        pins = _pin_signs(structure)
        right = -_gathered(structure, y, currents, nets) - amplifiers @ pins[:, nets]
        right[:, [k for k, net in enumerate(nets) if net == observed]] += 1.0
        amplifiers[:, used] = right @ np.linalg.inv(pins[np.ix_(used, nets)])
    return Adjoint(v, currents, amplifiers)


def all_voltages(
    structure: Structure, reduction: Reduction, voltages: Complex, a: Complex
) -> Complex:
    """Voltages of all nets, shape (samples, n + 2), from those of the reduced equations.

    `voltages` shape (samples, columns), `a` shape (samples, U).
    """
    n, outputs = structure.size, structure.pins[:, 2]
    v = np.zeros((voltages.shape[0], n + 2), dtype=complex)
    v[:, list(reduction.columns)] = voltages
    v[:, n] = 1.0
    if reduction.pairs:
        # v(+) - v(-) = a v(out) of the op-amps used gives the nets taken out, which are still 0.
        used, nets = (list(k) for k in zip(*reduction.pairs, strict=True))
        pins = _pin_signs(structure)
        known = a[:, used] * v[:, outputs[used]] - v @ pins[used].T
        v[:, nets] = known @ np.linalg.inv(pins[np.ix_(used, nets)]).T
    return v


def _pin_signs(structure: Structure) -> NDArray[np.float64]:
    """+1 at the + net and -1 at the - net of every op-amp, shape (U, n + 2)."""
    signs = np.zeros((len(structure.amplifiers), structure.size + 2))
    for k, (plus, minus, _) in enumerate(structure.pins):
        signs[k, plus] += 1.0
        signs[k, minus] -= 1.0
    return signs


def _gathered(structure: Structure, y: Complex, psi: Complex, nets: list[int]) -> Complex:
    """Sum over rows of (current row, column of net) * psi, for every net; shape (F, nets)."""
    p, q = structure.ends[:, 0], structure.ends[:, 1]
    flows = y * (psi[:, p] - psi[:, q])
    incidence = np.zeros((len(structure.refs), structure.size + 2))
    np.add.at(incidence, (np.arange(p.size), p), 1.0)
    np.add.at(incidence, (np.arange(q.size), q), -1.0)
    return np.asarray(flows @ incidence[:, nets])
