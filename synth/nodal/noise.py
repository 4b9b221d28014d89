"""Noise at a net, part by part, from one transposed solve.

White sources, uncorrelated: 4 k T / R of every resistor [A^2/Hz] (source resistance and load
included; a load that hangs on an op-amp output or the source contributes nothing, because the
net is held), and of every op-amp a voltage in series with its + input [V^2/Hz] and a current at
each of its two inputs [A^2/Hz].  Power densities add.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.constants import BOLTZMANN
from synth.nodal.adjoint import Adjoint
from synth.nodal.structure import Structure

__all__ = ["Noise", "noise_from"]

Real = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Noise:
    """Noise power density at one net.

    Parameters
    ----------
    frequency_hz
        Shape (F,).
    refs
        Of resistors, then op-amps, in circuit order: the columns of `power`.
    power
        Power density each part causes at the net [V^2/Hz], shape (F, parts).
    amplifier_voltage, amplifier_current
        The two shares of every op-amp [V^2/Hz], shape (F, U); the current is that of both inputs.
    """

    frequency_hz: Real
    refs: tuple[str, ...]
    power: Real
    amplifier_voltage: Real
    amplifier_current: Real

    @property
    def total(self) -> Real:
        """Power density of all together [V^2/Hz], shape (F,)."""
        return np.asarray(self.power.sum(axis=1))

    @property
    def density(self) -> Real:
        """Square root of `total` [V/rtHz], shape (F,)."""
        return np.sqrt(self.total)

    def rms(self) -> float:
        """Root mean square over the frequencies given [V], trapezoids on the linear axis."""
        return float(np.sqrt(np.trapezoid(self.total, self.frequency_hz)))

    def shares(self) -> dict[str, float]:
        """Share of every part in the power over the frequencies given, a ratio; 0 of nothing."""
        power = np.asarray(np.trapezoid(self.power, self.frequency_hz, axis=0))
        whole = float(power.sum())
        return {
            ref: float(p) / whole if whole else 0.0 for ref, p in zip(self.refs, power, strict=True)
        }


def noise_from(
    structure: Structure,
    adjoint: Adjoint,
    *,
    frequency_hz: Real,
    values: Real,
    temperature: float,
    voltage_noise: Real,
    current_noise: Real,
) -> Noise:
    """Noise at the observed net; `values` shape (P,), noise densities shape (U,)."""
    resistors = np.flatnonzero(structure.is_resistor)
    p, q = structure.ends[resistors].T
    transfer = np.abs(adjoint.currents[:, p] - adjoint.currents[:, q]) ** 2
    thermal = transfer * (4 * BOLTZMANN * temperature / values[resistors])
    plus, minus = structure.pins[:, 0], structure.pins[:, 1]
    by_current = np.abs(adjoint.currents) ** 2
    current = (by_current[:, plus] + by_current[:, minus]) * current_noise**2
    voltage = np.abs(adjoint.amplifiers) ** 2 * voltage_noise**2
    return Noise(
        frequency_hz=frequency_hz,
        refs=(*(structure.refs[k] for k in resistors), *structure.amplifiers),
        power=np.concatenate([thermal, voltage + current], axis=1),
        amplifier_voltage=voltage,
        amplifier_current=current,
    )
