"""Which limit the boards of a run fail first, where, and which parts drive it.

Both are tallied block by block, so that no board is kept.  Parts are ranked by the squared
correlation of their deviation with the signed error at the places, limits and frequencies, where
boards fail, each place weighted by the boards that fail there.  The error of the worst place of
each board would not do: it is an absolute value, and a part that moves the error up on one board
and down on the next hardly correlates with it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from synth.boardruns import Driver, Failures, LimitFailures
from synth.circuit import Circuit
from synth.job import Accept
from synth.tolerance.drawing import Drawn
from synth.tolerance.makeup import packages_of

__all__ = ["DriverTally", "FailureTally", "Place"]

Real = NDArray[np.float64]

_QUANTITIES = ("magnitude", "phase")

PLACES = 5
"""Frequencies of each limit at which drivers are looked for: each stands for as many boards."""

ROUNDING = 1e-28
"""Product of two variances below which one of the two is that of a constant: parts move by parts
in a million at least, errors by 1e-4 dB."""


@dataclass(frozen=True)
class Place:
    """A limit (0: magnitude, 1: phase), the index of a frequency, and the boards it stands for."""

    quantity: int
    index: int
    boards: float


class FailureTally:
    """Counts boards by the limit of which their error is the largest share, and the frequency."""

    def __init__(self, frequency_hz: Real, accept: Accept) -> None:
        self.failed = 0
        self._both = 0
        self._frequency = frequency_hz
        self._limits = (accept.magnitude_db, accept.phase_deg)
        # By limit and frequency: the boards that fail, and all of them.
        self._failing = np.zeros((2, frequency_hz.size), dtype=np.int64)
        self._every = np.zeros((2, frequency_hz.size), dtype=np.int64)

    def add(self, db: Real, deg: Real) -> tuple[Real, Real]:
        """Count a block of boards by their errors, shapes (boards, F); returns the largest dB error
        of each board and its largest error as a share of the limit, shapes (boards,)."""
        sizes = [np.abs(db), np.abs(deg)]
        where = np.array([size.argmax(axis=1) for size in sizes])
        rows = np.arange(db.shape[0])
        worst = np.array([size[rows, k] for size, k in zip(sizes, where, strict=True)])
        shares = worst / np.array(self._limits)[:, None]
        # An error that is no number is beyond any limit.
        beyond = ~(worst <= np.array(self._limits)[:, None])
        failing = beyond.any(axis=0)
        first = (shares[1] > shares[0]).astype(np.intp)
        self.failed += int(failing.sum())
        self._both += int(beyond.all(axis=0).sum())
        at = where[first, rows]
        np.add.at(self._every, (first, at), 1)
        np.add.at(self._failing, (first[failing], at[failing]), 1)
        return worst[0], shares.max(axis=0)

    def failures(self) -> Failures:
        """What has been counted."""
        found = [self._of_limit(q) for q in (0, 1)]
        return Failures(
            boards=self.failed,
            both=self._both,
            first=tuple(sorted(found, key=lambda f: -f.boards)),
        )

    def _of_limit(self, quantity: int) -> LimitFailures:
        counts = self._failing[quantity]
        boards = int(counts.sum())
        if not boards:
            return LimitFailures(quantity=_QUANTITIES[quantity], boards=0)
        low, middle, high = (self._frequency[k] for k in _quantiles(counts, (0.05, 0.5, 0.95)))
        return LimitFailures(
            quantity=_QUANTITIES[quantity],
            boards=boards,
            frequency_hz=float(middle),
            low_hz=float(low),
            high_hz=float(high),
        )

    def places(self) -> tuple[Place, ...]:
        """Where boards fail; where none does, where they come closest to it."""
        counted = self._failing if self.failed else self._every
        middles = tuple((k + 0.5) / PLACES for k in range(PLACES))
        found: dict[tuple[int, int], float] = {}
        for quantity, counts in enumerate(counted):
            if counts.any():
                for index in _quantiles(counts, middles):
                    key = quantity, index
                    found[key] = found.get(key, 0.0) + float(counts.sum()) / PLACES
        return tuple(Place(quantity, index, boards) for (quantity, index), boards in found.items())


class DriverTally:
    """Squared correlations of the deviations of parts with the errors at some places."""

    LEAST_BOARDS: ClassVar[int] = 30
    """With fewer boards a correlation says nothing of a part."""

    NOISE: ClassVar[float] = 4.0
    """Shares below this many times 1 / boards, which chance alone gives on average, are left
    out."""

    def __init__(self, circuit: Circuit, places: tuple[Place, ...]) -> None:
        self._nominal = np.array([p.value for p in circuit.passives], dtype=float)
        self._columns = [k for k, p in enumerate(circuit.passives) if p.on_board]
        self._figures = np.array([a.figures.gain_bandwidth for a in circuit.amplifiers])
        packages = packages_of(len(circuit.amplifiers))
        held: dict[int, list[int]] = {}
        for k, package in enumerate(packages):
            held.setdefault(package, []).append(k)
        self._packages = [first for first, *_ in held.values()]
        self._names: list[tuple[tuple[str, ...], str]] = [
            ((p.ref,), p.kind) for p in circuit.bought
        ]
        for inside in held.values():
            refs = tuple(circuit.amplifiers[k].ref for k in inside)
            self._names.append((refs, "op_amp"))
        self._places = places
        self._count = 0
        self._start: Real | None = None
        columns = len(self._names) + len(places)
        self._sum = np.zeros(columns)
        self._products = np.zeros((columns, columns))

    def add(self, drawn: Drawn, db: Real, deg: Real) -> None:
        """A block of boards with their errors at the places, shapes (boards, places)."""
        spots = enumerate(self._places)
        errors = np.stack([(db, deg)[p.quantity][:, k] for k, p in spots], axis=1)
        errors[~np.isfinite(errors)] = 0.0
        both = np.concatenate([self._deviations(drawn), errors], axis=1)
        if self._start is None:
            self._start = both.mean(axis=0)  # so that no large mean is squared
        both -= self._start
        self._count += both.shape[0]
        self._sum += both.sum(axis=0)
        self._products += both.T @ both

    def _deviations(self, drawn: Drawn) -> Real:
        """Relative, of the bought parts and of the first op-amp of each package."""
        passives = (drawn.values / self._nominal)[:, self._columns] - 1
        if drawn.gain_bandwidth is None:
            amplifiers = np.zeros((passives.shape[0], len(self._packages)))
        else:
            amplifiers = (drawn.gain_bandwidth / self._figures)[:, self._packages] - 1
        return np.concatenate([passives, amplifiers], axis=1)

    def drivers(self) -> tuple[Driver, ...]:
        """By falling share, those beyond chance."""
        n, parts = self._count, len(self._names)
        mean = self._sum / n
        covariance = self._products / n - np.outer(mean, mean)
        variance = covariance.diagonal()
        scale = np.outer(variance[:parts], variance[parts:])
        squared = np.divide(
            covariance[:parts, parts:] ** 2, scale, out=np.zeros_like(scale), where=scale > ROUNDING
        )
        weights = np.array([p.boards for p in self._places])
        shares = np.minimum(squared @ weights / weights.sum(), 1.0)
        ranked = sorted(range(shares.size), key=lambda k: -shares[k])
        return tuple(
            Driver(refs=self._names[k][0], kind=self._names[k][1], share=float(shares[k]))
            for k in ranked
            if shares[k] > self.NOISE / n
        )


def _quantiles(counts: NDArray[np.int64], shares: tuple[float, ...]) -> list[int]:
    """Indices at which the running sum of `counts` reaches these shares of the total."""
    running = np.cumsum(counts)
    return [int(np.searchsorted(running, share * running[-1], side="left")) for share in shares]
