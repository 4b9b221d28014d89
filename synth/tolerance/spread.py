"""First-order spread of a response over the boards of a population, and its causes.

ln H is nearly linear in the ln of the parts, and in 1 / gain-bandwidth of the op-amps.  What a
population draws is taken apart into causes that are not correlated: the deviation each part has
on its own, what a reel or a network shares, the drift of each part with temperature, the op-amps
of each package.  Each moves ln H along one direction, and the variance of ln H is the sum of
their squares: their shares are never negative, and add up.

A drift alpha (T - 25 deg C), alpha without a preferred sign, has the variance of alpha times the
mean of (T - 25 deg C)^2, and those of two parts are not correlated although their temperature is
the same; those of a network are, by what its coefficients share.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit
from synth.errors import CircuitError
from synth.evidence import DB_PER_NEPER
from synth.nodal import Sensitivities
from synth.population import REFERENCE_TEMPERATURE, Population
from synth.tolerance.drawing import variance_within
from synth.tolerance.makeup import Makeup

__all__ = ["Causes", "Spread", "predicted_spread"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Name = tuple[str, tuple[str, ...]]


@dataclass(frozen=True, eq=False)
class Spread:
    """One standard deviation of the magnitude [dB] and the phase [deg], shapes (F,)."""

    magnitude_db: Real
    phase_deg: Real


@dataclass(frozen=True, eq=False)
class Causes:
    """What spreads the boards of a circuit: K causes that are not correlated.

    Parameters
    ----------
    names
        Of each: ``"own"``, ``"lot"``, ``"network"``, ``"temperature"`` or ``"op_amp"``, and the
        references it moves.
    passives, amplifiers
        One standard deviation of each cause in ln of every passive, shape (K, P), and in
        -(1 / gain-bandwidth) of every op-amp, relative, shape (K, U); circuit order.
    """

    names: tuple[Name, ...]
    passives: Real
    amplifiers: Real

    @classmethod
    def of(
        cls,
        circuit: Circuit,
        population: Population | None = None,
        tolerances: Mapping[str, float] | None = None,
    ) -> Causes:
        """Those of a population (None: each part uniform within its tolerance); `tolerances` by
        reference, those that are other than in the circuit."""
        population = population or Population()
        makeup = Makeup.of(circuit, population, tolerances)
        refs = [p.ref for p in circuit.bought]
        amplifiers = [a.ref for a in circuit.amplifiers]
        found: list[tuple[str, Real]] = [
            *_parts_own(makeup),
            *_shared(makeup),
            *_drifts(makeup, population.temperature),
        ]
        found = [(cause, loading) for cause, loading in found if loading.any()]
        packages = list(_packages(makeup, population.gain_bandwidth_spread))
        columns = [k for k, p in enumerate(circuit.passives) if p.on_board]
        count = len(found) + len(packages)
        of_parts = np.zeros((count, len(circuit.passives)))
        of_amplifiers = np.zeros((count, len(amplifiers)))
        for row, (_, loading) in enumerate(found):
            of_parts[row, columns] = loading
        for row, loading in enumerate(packages, start=len(found)):
            of_amplifiers[row] = loading
        names = [(cause, _named(refs, loading)) for cause, loading in found]
        names += [("op_amp", _named(amplifiers, loading)) for loading in packages]
        return cls(tuple(names), of_parts, of_amplifiers)

    def effects(self, sensitivities: Sensitivities) -> Complex:
        """One standard deviation of each cause in ln H, shape (F, K).

        Raises
        ------
        CircuitError
            Sensitivities of another circuit.
        """
        shape = (len(sensitivities.refs), len(sensitivities.amplifiers))
        own = (self.passives.shape[1], self.amplifiers.shape[1])
        if shape != own:
            raise CircuitError(
                f"got sensitivities to {shape[0]} parts and {shape[1]} op-amps, expected {own[0]} "
                f"and {own[1]}"
            )
        by_part = sensitivities.passives @ self.passives.T
        return np.asarray(by_part + sensitivities.gain_bandwidth @ self.amplifiers.T)


def predicted_spread(
    sensitivities: Sensitivities, circuit: Circuit, population: Population | None = None
) -> Spread:
    """Spread of the response over frequency, over the boards of a population (None: each part
    uniform within its tolerance).

    Raises
    ------
    CircuitError
        Sensitivities of another circuit.
    JobError
        A network of a part that the circuit does not have.
    """
    effects = Causes.of(circuit, population).effects(sensitivities)
    return Spread(
        magnitude_db=DB_PER_NEPER * np.sqrt((effects.real**2).sum(axis=1)),
        phase_deg=np.degrees(np.sqrt((effects.imag**2).sum(axis=1))),
    )


def _parts_own(makeup: Makeup) -> Iterator[tuple[str, Real]]:
    """What each part has on its own, at 25 deg C; a reel of one part is that part's own."""
    size = makeup.tolerance * (1 - makeup.lot_share)
    for matched in makeup.networks:
        size[matched.places] = matched.apart
    variance = size**2 * _variances(makeup)
    for lot in makeup.lots:
        if lot.size == 1:
            variance[lot] += (makeup.lot_share[lot] * makeup.tolerance[lot]) ** 2 / 3
    for k, one in enumerate(variance):
        yield "own", _at(makeup, k, math.sqrt(one))


def _shared(makeup: Makeup) -> Iterator[tuple[str, Real]]:
    """What the parts of a reel, and those of a network, have in common."""
    for lot in makeup.lots:
        if lot.size > 1:
            yield "lot", _at(makeup, lot, makeup.lot_share[lot] * makeup.tolerance[lot] / 3**0.5)
    variances = _variances(makeup)
    for matched in makeup.networks:
        sigma = matched.together * math.sqrt(variances[matched.places[0]])
        yield "network", _at(makeup, matched.places, sigma)


def _drifts(makeup: Makeup, temperature: tuple[float, float] | None) -> Iterator[tuple[str, Real]]:
    """The drift of each part, and what the parts of a network share of it."""
    if temperature is None:
        return
    low, high = temperature
    middle, reach = (low + high) / 2 - REFERENCE_TEMPERATURE, (high - low) / 2
    sigma = math.sqrt((middle**2 + reach**2 / 3) / 3)
    own = makeup.coefficient.copy()
    for matched in makeup.networks:
        if matched.tracking is not None:
            own[matched.places] = matched.tracking
            yield "temperature", _at(makeup, matched.places, matched.drift * sigma)
    for k, coefficient in enumerate(own):
        yield "temperature", _at(makeup, k, coefficient * sigma)


def _packages(makeup: Makeup, share: float) -> Iterator[Real]:
    """The op-amps of each package.  1 / (1 + share n), n uniform within +-1, has the mean
    m = artanh(share) / share and the mean square 1 / (1 - share^2)."""
    if not share:
        return
    sigma = math.sqrt(1 / (1 - share**2) - (math.atanh(share) / share) ** 2)
    for package in np.unique(makeup.packages):
        yield np.where(makeup.packages == package, sigma, 0.0)


def _variances(makeup: Makeup) -> Real:
    """Of what parts draw, in squares of their tolerance."""
    return np.where(makeup.normal, variance_within("normal"), variance_within("uniform"))


def _at(makeup: Makeup, places: int | NDArray[np.intp], sigma: float | Real) -> Real:
    loading = np.zeros(makeup.tolerance.size)
    loading[places] = sigma
    return loading


def _named(refs: list[str], loading: Real) -> tuple[str, ...]:
    return tuple(ref for ref, size in zip(refs, loading, strict=True) if size)
