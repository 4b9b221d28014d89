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

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit, Passive
from synth.errors import JobError
from synth.parts import OP_AMPS_PER_PACKAGE
from synth.population import REFERENCE_TEMPERATURE, Network, PartSpread, Population
from synth.quantities import show

__all__ = ["BoardSource", "Drawn", "check_networks", "packages_of", "within_tolerance"]

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

    Raises
    ------
    JobError
        A network of a part that the circuit does not have.
    """

    def __init__(self, circuit: Circuit, population: Population, seed: int) -> None:
        self._population = population
        self._nominal = np.array([p.value for p in circuit.passives], dtype=float)
        self._bought = np.array([p.on_board for p in circuit.passives], dtype=bool)
        parts = circuit.bought
        self._tolerance = np.array([p.tolerance for p in parts], dtype=float)
        spreads = [population.of(p.kind) for p in parts]
        self._normal = np.array([s.distribution == "normal" for s in spreads], dtype=bool)
        self._coefficient = np.array([s.temperature_coefficient for s in spreads], dtype=float)
        # Places among the bought parts: of each network, and of each lot.
        index = {p.ref: k for k, p in enumerate(parts)}
        self._networks = [
            (np.array([index[p.ref] for p in members], dtype=np.intp), network)
            for _, network, members in _matched_parts(circuit, population)
        ]
        matched = {int(k) for places, _ in self._networks for k in places}
        self._lots = _lots(parts, spreads, matched)
        self._lot_share = np.array(
            [0.0 if k in matched else s.lot for k, s in enumerate(spreads)], dtype=float
        )
        self._figures = np.array([a.figures.gain_bandwidth for a in circuit.amplifiers])
        self._packages = np.array(packages_of(len(self._figures)), dtype=np.intp)
        self._own = np.random.default_rng(seed)
        self._generators = {
            cause: np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(k,)))
            for k, cause in enumerate(_CAUSES)
        }

    def draw(self, boards: int) -> Drawn:
        """The next so many boards."""
        values = np.tile(self._nominal, (boards, 1))
        own = self._own.uniform(-1.0, 1.0, (boards, self._tolerance.size))
        values[:, self._bought] *= 1.0 + self._deviations(own)
        if self._population.temperature is not None:
            values[:, self._bought] *= 1.0 + self._drifts(boards, self._population.temperature)
        return Drawn(values, self._gain_bandwidths(boards))

    def _deviations(self, own: Real) -> Real:
        """Of the bought parts at 25 deg C, from what each draws on its own."""
        shaped = _shaped(own, self._normal)
        if self._lots:
            shaped *= 1.0 - self._lot_share
            offsets = self._numbers("lots", own.shape[0], len(self._lots))
            for lot, offset in zip(self._lots, offsets.T, strict=True):
                shaped[:, lot] += self._lot_share[lot] * offset[:, None]
        deviation: Real = shaped * self._tolerance
        if self._networks:
            common = self._numbers("networks", own.shape[0], len(self._networks))
            for (places, network), number in zip(self._networks, common.T, strict=True):
                tightest = self._tolerance[places].min()
                h = min(network.half_tolerance, tightest)
                w = (tightest - h) / (1 + h)
                together = _shaped(number[:, None], self._normal[places[:1]])
                deviation[:, places] = (1 + w * together) * (1 + h * shaped[:, places]) - 1
        return deviation

    def _drifts(self, boards: int, temperature: tuple[float, float]) -> Real:
        """alpha (T - 25 deg C) of the bought parts."""
        low, high = temperature
        number = self._numbers("temperature", boards, 1)
        kelvin = (low + high) / 2 - REFERENCE_TEMPERATURE + (high - low) / 2 * number
        own = self._numbers("coefficients", boards, self._tolerance.size)
        alpha = own * self._coefficient
        common = self._numbers("common coefficients", boards, len(self._networks))
        for (places, network), shared in zip(self._networks, common.T, strict=True):
            if network.tracking is not None:
                apart = network.tracking / 2
                rest = max(float(self._coefficient[places].min()) - apart, 0.0)
                alpha[:, places] = rest * shared[:, None] + apart * own[:, places]
        return np.asarray(alpha * kelvin)

    def _gain_bandwidths(self, boards: int) -> Real | None:
        share = self._population.gain_bandwidth_spread
        if not share or not self._packages.size:
            return None
        number = self._numbers("op-amps", boards, int(self._packages[-1]) + 1)
        return np.asarray(self._figures * (1.0 + share * number[:, self._packages]))

    def _numbers(self, cause: str, boards: int, count: int) -> Real:
        """Uniform within +-1, shape (boards, count)."""
        return self._generators[cause].uniform(-1.0, 1.0, (boards, count))


def packages_of(amplifiers: int) -> tuple[int, ...]:
    """The package of each op-amp of a circuit, counted from 0.

    >>> packages_of(6)
    (0, 0, 0, 0, 1, 1)
    """
    return tuple(k // OP_AMPS_PER_PACKAGE for k in range(amplifiers))


def within_tolerance(number: Real, distribution: str) -> Real:
    """What a uniform `number` within +-1 becomes in a distribution, in tolerances.

    The normal one is cut at 3 sigma, which are the tolerance; standard deviations are 0.5774 and
    0.3289 tolerances.
    """
    if distribution == "uniform":
        return number
    from scipy.special import ndtri

    return np.asarray(ndtri(0.5 + 0.5 * _CUT_SHARE * number) / _CUT)


def check_networks(circuit: Circuit, population: Population) -> None:
    """That the parts of all networks are in the circuit, and can be as well matched as stated.

    Raises
    ------
    JobError
        A reference the circuit does not have, or a ratio tolerance above that of the parts.
    """
    for key, network, parts in _matched_parts(circuit, population):
        worst = min(parts, key=lambda p: p.tolerance)
        if network.tolerance > worst.tolerance * (1 + 1e-9):
            raise JobError(
                f"got {show(network.tolerance, '%')} between parts, expected at most the "
                f"{show(worst.tolerance, '%')} of {worst.ref} itself",
                key=f"{key}.tolerance",
            )


def _matched_parts(
    circuit: Circuit, population: Population
) -> list[tuple[str, Network, list[Passive]]]:
    """Key, network and parts of each network, or the error with the references there are."""
    out = []
    for number, network in enumerate(population.networks, start=1):
        key = f"board.networks[{number}]"
        parts: list[Passive] = []
        for ref in network.refs:
            found = [p for p in circuit.bought if _belongs(p.ref, ref, circuit)]
            if not found:
                raise JobError(
                    f"got {ref}, a reference that does not exist in this form, expected "
                    f"{circuit.references_like(ref)}",
                    key=f"{key}.refs",
                )
            parts += found
        out.append((key, network, parts))
    return out


def _shaped(own: Real, normal: NDArray[np.bool_]) -> Real:
    """Columns of uniform numbers in the distribution of their parts."""
    if not normal.any():
        return own
    out = own.copy()
    out[:, normal] = within_tolerance(own[:, normal], "normal")
    return out


def _lots(
    parts: Sequence[Passive], spreads: Sequence[PartSpread], matched: set[int]
) -> list[Places]:
    """Parts of equal kind, value and tolerance, where lots count; a network is a lot of its own."""
    lots: dict[tuple[str, float, float], list[int]] = {}
    for k, (part, spread) in enumerate(zip(parts, spreads, strict=True)):
        if spread.lot and k not in matched:
            lots.setdefault((part.kind, part.value, part.tolerance), []).append(k)
    return [np.array(places, dtype=np.intp) for places in lots.values()]


def _belongs(ref: str, stated: str, circuit: Circuit) -> bool:
    """Whether a part is the one stated, or one of the two that stand for it."""
    return ref == stated or (stated not in circuit.by_ref and ref in (f"{stated}A", f"{stated}B"))
