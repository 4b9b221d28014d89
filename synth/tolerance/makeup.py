"""What a population says of the parts of one circuit: who shares a reel, a network or a package.

A network's ratio tolerance above the tolerance of its parts (a stock may hold tighter ones than
were thought of) says nothing beyond that.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit, Passive
from synth.errors import JobError
from synth.parts import OP_AMPS_PER_PACKAGE
from synth.population import REFERENCE_TEMPERATURE, Network, PartSpread, Population
from synth.quantities import show

__all__ = ["Makeup", "Matched", "check_networks", "packages_of", "value_ranges"]

Real = NDArray[np.float64]
Places = NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class Matched:
    """A network: its parts, and how far they go apart and together.

    Parameters
    ----------
    places
        Of its parts among the bought ones.
    apart, together
        Largest deviation h of a part from the others, and w of them all: 1 + d is
        (1 + w c)(1 + h u), such that each part keeps its own tolerance and the ratio of two that
        of the network.
    tracking, drift
        The same for temperature coefficients [1/K]; `tracking` None: each part has its own.
    """

    places: Places
    apart: float
    together: float
    tracking: float | None
    drift: float


@dataclass(frozen=True, eq=False)
class Makeup:
    """The bought parts of a circuit, in its order, shapes (bought,), and its op-amps.

    Parameters
    ----------
    tolerance, normal, coefficient
        Relative tolerance, whether it is that of a normal distribution, and the largest
        temperature coefficient [1/K].
    lots, lot_share
        Places of the parts of each reel, and the share of the tolerance that is an offset of it.
    networks
        The matched parts.
    figures, packages
        Of the op-amps: gain-bandwidth [Hz] and package, shapes (U,).
    """

    tolerance: Real
    normal: NDArray[np.bool_]
    coefficient: Real
    lots: tuple[Places, ...]
    lot_share: Real
    networks: tuple[Matched, ...]
    figures: Real
    packages: Places

    @classmethod
    def of(
        cls,
        circuit: Circuit,
        population: Population,
        tolerances: Mapping[str, float] | None = None,
    ) -> Makeup:
        """Of a circuit; `tolerances` by reference, those that are other than in the circuit.

        Raises
        ------
        JobError
            A network of a part that the circuit does not have.
        """
        parts = circuit.bought
        other = tolerances or {}
        tolerance = np.array([other.get(p.ref, p.tolerance) for p in parts], dtype=float)
        spreads = [population.of(p.kind) for p in parts]
        coefficient = np.array([s.temperature_coefficient for s in spreads], dtype=float)
        index = {p.ref: k for k, p in enumerate(parts)}
        networks = tuple(
            _matched(
                network,
                np.array([index[p.ref] for p in members], dtype=np.intp),
                tolerance,
                coefficient,
            )
            for _, network, members in _matched_parts(circuit, population)
        )
        matched = {int(k) for network in networks for k in network.places}
        return cls(
            tolerance=tolerance,
            normal=np.array([s.distribution == "normal" for s in spreads], dtype=bool),
            coefficient=coefficient,
            lots=_lots(parts, spreads, matched),
            lot_share=np.array(
                [0.0 if k in matched else s.lot for k, s in enumerate(spreads)], dtype=float
            ),
            networks=networks,
            figures=np.array([a.figures.gain_bandwidth for a in circuit.amplifiers]),
            packages=np.array(packages_of(len(circuit.amplifiers)), dtype=np.intp),
        )


def value_ranges(circuit: Circuit, population: Population) -> Real:
    """Smallest and largest multiple of its nominal value that any passive of any board may have, by
    its tolerance and by what its temperature coefficient makes of the range of temperatures.

    Shape (2, P), in circuit order, 1 for what is not on the board.
    """
    makeup = Makeup.of(circuit, population)
    drift = makeup.coefficient.copy()
    for matched in makeup.networks:
        if matched.tracking is not None:
            drift[matched.places] = matched.drift + matched.tracking
    if population.temperature is None:
        drift[:] = 0.0
    else:
        drift *= max(abs(t - REFERENCE_TEMPERATURE) for t in population.temperature)
    out = np.ones((2, len(circuit.passives)))
    on_board = [p.on_board for p in circuit.passives]
    out[0, on_board] = (1 - makeup.tolerance) * (1 - drift)
    out[1, on_board] = (1 + makeup.tolerance) * (1 + drift)
    return out


def packages_of(amplifiers: int) -> tuple[int, ...]:
    """The package of each op-amp of a circuit, counted from 0.

    >>> packages_of(6)
    (0, 0, 0, 0, 1, 1)
    """
    return tuple(k // OP_AMPS_PER_PACKAGE for k in range(amplifiers))


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


def _matched(network: Network, places: Places, tolerance: Real, coefficient: Real) -> Matched:
    tightest = float(tolerance[places].min())
    apart = min(network.half_tolerance, tightest)
    tracking = None if network.tracking is None else network.tracking / 2
    return Matched(
        places=places,
        apart=apart,
        together=(tightest - apart) / (1 + apart),
        tracking=tracking,
        drift=max(float(coefficient[places].min()) - (tracking or 0.0), 0.0),
    )


def _lots(
    parts: Sequence[Passive], spreads: Sequence[PartSpread], matched: set[int]
) -> tuple[Places, ...]:
    """Parts of equal kind, value and tolerance, where lots count; a network is a lot of its own."""
    lots: dict[tuple[str, float, float], list[int]] = {}
    for k, (part, spread) in enumerate(zip(parts, spreads, strict=True)):
        if spread.lot and k not in matched:
            lots.setdefault((part.kind, part.value, part.tolerance), []).append(k)
    return tuple(np.array(places, dtype=np.intp) for places in lots.values())


def _belongs(ref: str, stated: str, circuit: Circuit) -> bool:
    """Whether a part is the one stated, or one of the two that stand for it."""
    return ref == stated or (stated not in circuit.by_ref and ref in (f"{stated}A", f"{stated}B"))
