"""Boards drawn from a population of parts: the values of every passive, the gain-bandwidth of
every op-amp.

Board k of a seed is the same whatever the number of boards and the size of the blocks: what a
board draws is drawn board by board.  Each cause of spread has a generator of its own, a child of
the seed, so that one more cause leaves what the others draw as it is; and a distribution bends
the same uniform numbers, so that the boards of two distributions can be compared one by one.

The value of a part is::

    nominal (1 + d) (1 + alpha (T - 25 deg C))

On its own, d is within +-tol.  Of a lot, d = tol (lot o + (1 - lot) u), o that of the lot and u
the part's own, both within +-1.  In a network, 1 + d = (1 + w c)(1 + h u), c that of the network:
h is such that the ratio of two parts keeps the ratio tolerance, w = (tol - h)/(1 + h) such that
each part keeps its own.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit
from synth.population import REFERENCE_TEMPERATURE, Population
from synth.tolerance.makeup import Makeup

__all__ = ["BoardSource", "Drawn", "variance_within", "within_tolerance"]

Real = NDArray[np.float64]
Places = NDArray[np.intp]

_CUT = 3.0  # standard deviations at which a normal distribution is cut: the tolerance
_CUT_SHARE = 0.9973002039367398  # of a normal distribution within them

# Children of the seed, by what is drawn; the parts' own numbers come from the seed itself.
_CAUSES = ("lots", "networks", "temperature", "coefficients", "common coefficients", "op-amps")


@dataclass(frozen=True, eq=False)
class Drawn:
    """Some boards.

    Parameters
    ----------
    values
        Of the passives in circuit order [ohm], [F], shape (boards, P).
    gain_bandwidth
        Of the op-amps in circuit order [Hz], shape (boards, U); None where all have their
        figure.
    """

    values: Real
    gain_bandwidth: Real | None = None

    def part(self, which: slice | Places) -> Drawn:
        """Some of these boards."""
        gain_bandwidth = self.gain_bandwidth
        return Drawn(self.values[which], None if gain_bandwidth is None else gain_bandwidth[which])


class BoardSource:
    """Draws the boards of a circuit, one block after the other.

    Parameters
    ----------
    circuit
        Nominal values and tolerances.
    population
        Where parts come from.  A ratio tolerance above the tolerance of the parts (a stock may
        hold tighter ones than were thought of) says nothing beyond that.
    seed
        Of all boards.
    tolerances
        By reference, those that are other than in the circuit: the same boards otherwise, with
        such a part still of the reel it came from.

    Raises
    ------
    JobError
        A network of a part that the circuit does not have.
    """

    def __init__(
        self,
        circuit: Circuit,
        population: Population,
        seed: int,
        *,
        tolerances: Mapping[str, float] | None = None,
    ) -> None:
        self._population = population
        self._nominal = np.array([p.value for p in circuit.passives], dtype=float)
        self._bought = np.array([p.on_board for p in circuit.passives], dtype=bool)
        self._makeup = Makeup.of(circuit, population, tolerances)
        self._own = np.random.default_rng(seed)
        self._generators = {
            cause: np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(k,)))
            for k, cause in enumerate(_CAUSES)
        }

    def draw(self, boards: int) -> Drawn:
        """The next so many boards."""
        values = np.tile(self._nominal, (boards, 1))
        own = self._own.uniform(-1.0, 1.0, (boards, self._makeup.tolerance.size))
        values[:, self._bought] *= 1.0 + self._deviations(own)
        if self._population.temperature is not None:
            values[:, self._bought] *= 1.0 + self._drifts(boards, self._population.temperature)
        return Drawn(values, self._gain_bandwidths(boards))

    def _deviations(self, own: Real) -> Real:
        """Of the bought parts at 25 deg C, from what each draws on its own."""
        makeup = self._makeup
        shaped = _shaped(own, makeup.normal)
        if makeup.lots:
            shaped *= 1.0 - makeup.lot_share
            offsets = self._numbers("lots", own.shape[0], len(makeup.lots))
            for lot, offset in zip(makeup.lots, offsets.T, strict=True):
                shaped[:, lot] += makeup.lot_share[lot] * offset[:, None]
        deviation: Real = shaped * makeup.tolerance
        if makeup.networks:
            common = self._numbers("networks", own.shape[0], len(makeup.networks))
            for matched, number in zip(makeup.networks, common.T, strict=True):
                places, h, w = matched.places, matched.apart, matched.together
                together = _shaped(number[:, None], makeup.normal[places[:1]])
                deviation[:, places] = (1 + w * together) * (1 + h * shaped[:, places]) - 1
        return deviation

    def _drifts(self, boards: int, temperature: tuple[float, float]) -> Real:
        """alpha (T - 25 deg C) of the bought parts."""
        makeup = self._makeup
        low, high = temperature
        number = self._numbers("temperature", boards, 1)
        kelvin = (low + high) / 2 - REFERENCE_TEMPERATURE + (high - low) / 2 * number
        own = self._numbers("coefficients", boards, makeup.tolerance.size)
        alpha = own * makeup.coefficient
        common = self._numbers("common coefficients", boards, len(makeup.networks))
        for matched, shared in zip(makeup.networks, common.T, strict=True):
            if matched.tracking is not None:
                places, apart = matched.places, matched.tracking
                alpha[:, places] = matched.drift * shared[:, None] + apart * own[:, places]
        return np.asarray(alpha * kelvin)

    def _gain_bandwidths(self, boards: int) -> Real | None:
        share, packages = self._population.gain_bandwidth_spread, self._makeup.packages
        if not share or not packages.size:
            return None
        number = self._numbers("op-amps", boards, int(packages[-1]) + 1)
        return np.asarray(self._makeup.figures * (1.0 + share * number[:, packages]))

    def _numbers(self, cause: str, boards: int, count: int) -> Real:
        """Uniform within +-1, shape (boards, count)."""
        return self._generators[cause].uniform(-1.0, 1.0, (boards, count))


def within_tolerance(number: Real, distribution: str) -> Real:
    """What a uniform `number` within +-1 becomes in a distribution, in tolerances.

    The normal one is cut at 3 sigma, which are the tolerance; standard deviations are 0.5774 and
    0.3289 tolerances.
    """
    if distribution == "uniform":
        return number
    from scipy.special import ndtri

    return np.asarray(ndtri(0.5 + 0.5 * _CUT_SHARE * number) / _CUT)


def variance_within(distribution: str) -> float:
    """Variance of `within_tolerance` of a uniform number, in squares of the tolerance.

    >>> round(variance_within("normal") ** 0.5, 4), round(variance_within("uniform") ** 0.5, 4)
    (0.3289, 0.5774)
    """
    if distribution == "uniform":
        return 1 / 3
    density = math.exp(-(_CUT**2) / 2) / math.sqrt(2 * math.pi)
    return (1 - 2 * _CUT * density / _CUT_SHARE) / _CUT**2


def _shaped(own: Real, normal: NDArray[np.bool_]) -> Real:
    """Columns of uniform numbers in the distribution of their parts."""
    if not normal.any():
        return own
    out = own.copy()
    out[:, normal] = within_tolerance(own[:, normal], "normal")
    return out
