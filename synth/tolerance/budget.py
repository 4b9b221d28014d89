"""The error budget: what the choice of values takes of it, what the spread of boards takes, and
whose tighter grade would help most.

Everything is of first order: ln H moves with the ln of each part by its sensitivity, and with
1 / gain-bandwidth of each op-amp; parts, temperature and op-amps are those of the population that
the run of boards draws from (`synth.tolerance.spread`).

The budget is drawn up where it is tightest: of magnitude and phase, at the frequency where
|nominal error| + 2 sigma is the largest share of its limit.  There the mean square error of a
board is (nominal error)^2 + sigma^2, and its two terms are the share of the choice of values
and the share of the spread.  Each cause has a share of sigma^2.

Whose tighter grade helps most is not read off one frequency: some thousand boards are drawn in
the same linear model, each likely part in turn given its next grade on the very same boards,
and the part is named that lowers most the 95th percentile over boards of the largest share of
a limit, magnitude or phase, anywhere in the band.  Matched parts get a grade together, and a
part stays with the reel it came from.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit
from synth.evidence import DB_PER_NEPER, ResponseError
from synth.job import Accept
from synth.nodal import NodalProgram, Sensitivities
from synth.population import Population
from synth.results import ErrorBudget, SpreadShare, Tightened
from synth.tolerance.drawing import BoardSource
from synth.tolerance.makeup import Makeup
from synth.tolerance.spread import Causes

__all__ = ["GRADES", "error_budget", "next_grade"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]

# Tolerances that are commonly sold, from coarse to fine (common practice).  Capacitors below
# 1 % are hardly to be had.
GRADES = {
    "resistor": (0.1, 0.05, 0.02, 0.01, 0.005, 0.001),
    "capacitor": (0.2, 0.1, 0.05, 0.02, 0.01),
}

# Standard deviations that are taken to be used up beside the nominal error: about 19 of 20
# boards stay within at one frequency.
SIGMAS = 2.0

# Boards of the linear model, and at most how many frequencies they are judged at.
BOARDS = 4000
FREQUENCIES = 100

# Parts that are tried with a tighter grade: those whose grade takes the most off the variance.
CANDIDATES = 8


def next_grade(kind: str, tolerance: float) -> float | None:
    """The next tighter grade of a ``"resistor"`` or ``"capacitor"``; None at the tightest.

    >>> next_grade("resistor", 0.01), next_grade("capacitor", 0.03), next_grade("capacitor", 0.01)
    (0.005, 0.02, None)
    """
    return next((g for g in GRADES[kind] if g < tolerance * (1 - 1e-9)), None)


def error_budget(
    program: NodalProgram,
    circuit: Circuit,
    nominal: ResponseError,
    frequency_hz: Real,
    *,
    accept: Accept,
    seed: int,
    population: Population | None = None,
) -> ErrorBudget:
    """The budget of a circuit with chosen values.

    Parameters
    ----------
    program
        Compiled from `circuit`.
    nominal
        Error of the nominal board over `frequency_hz`, shape (F,).
    accept
        The limits.
    seed
        Of the boards of the linear model.
    population
        Where the parts come from; None: each uniform within its tolerance.
    """
    model = _Model(circuit, population or Population(), program.sensitivities(frequency_hz))
    limits = (accept.magnitude_db, accept.phase_deg)
    errors = (nominal.magnitude_db, nominal.phase_deg)
    variances = model.variances({})
    sigma = np.sqrt(variances.sum(axis=2))
    used = np.array(
        [(np.abs(e) + SIGMAS * s) / m for e, s, m in zip(errors, sigma, limits, strict=True)]
    )
    which, place = (int(k) for k in np.unravel_index(int(np.argmax(used)), used.shape))
    boards = _LinearBoards(model, nominal, accept, seed, _judged(used))
    before = boards.largest({})

    def tightened(kind: str, chosen: Iterable[str]) -> Tightened | None:
        return _tightened(kind, chosen, model=model, at=(which, place), boards=boards)

    alone = [tightened("part", group) for group in _likely(model, np.square(limits))]
    kinds = [
        tightened(kind, [p.ref for p in circuit.bought if p.kind == kind and p.tolerance])
        for kind in ("resistor", "capacitor")
    ]
    return ErrorBudget(
        quantity=("magnitude", "phase")[which],
        unit=("dB", "deg")[which],
        frequency_hz=float(frequency_hz[place]),
        limit=limits[which],
        nominal=float(errors[which][place]),
        spread=float(sigma[which, place]),
        sigmas=SIGMAS,
        shares=_shares(model.causes({}).names, variances[which, place]),
        error_95_db=before[0],
        limit_share_95=before[1],
        part=min(filter(None, alone), key=lambda t: t.limit_share_95, default=None),
        kinds=tuple(filter(None, kinds)),
    )


def _shares(
    names: tuple[tuple[str, tuple[str, ...]], ...], variance: Real
) -> tuple[SpreadShare, ...]:
    """Causes by falling share of the variance, the drifts of all parts as one."""
    total = float(variance.sum())
    found: dict[tuple[str, tuple[str, ...]], float] = {}
    for (cause, refs), one in zip(names, variance.tolist(), strict=True):
        key = (cause, () if cause == "temperature" else refs)
        found[key] = found.get(key, 0.0) + one
    ranked = sorted(found.items(), key=lambda item: -item[1])
    return tuple(
        SpreadShare(cause=cause, refs=refs, share=one / total)
        for (cause, refs), one in ranked
        if one > 0
    )


@dataclass(frozen=True, eq=False)
class _Model:
    """How the parts of a population move ln H, some of them at other tolerances."""

    circuit: Circuit
    population: Population
    sensitivities: Sensitivities

    def causes(self, tolerances: Mapping[str, float]) -> Causes:
        return Causes.of(self.circuit, self.population, tolerances)

    def variances(self, tolerances: Mapping[str, float]) -> Real:
        """Of magnitude [dB^2] and of phase [deg^2], by cause: shape (2, F, K)."""
        effects = self.causes(tolerances).effects(self.sensitivities)
        return np.array([(DB_PER_NEPER * effects.real) ** 2, np.degrees(effects.imag) ** 2])

    def groups(self) -> list[tuple[str, ...]]:
        """Parts that get a tighter grade together, in circuit order: one, or a network."""
        networks = [
            tuple(self.circuit.bought[k].ref for k in matched.places)
            for matched in Makeup.of(self.circuit, self.population).networks
        ]
        network_of = {ref: refs for refs in networks for ref in refs}
        return list(dict.fromkeys(network_of.get(p.ref, (p.ref,)) for p in self.circuit.bought))

    def grades(self, refs: Iterable[str]) -> dict[str, float]:
        """The next grade of the parts that have one."""
        parts = [self.circuit.by_ref[ref] for ref in refs]
        found = {p.ref: next_grade(p.kind, p.tolerance) for p in parts}
        return {ref: grade for ref, grade in found.items() if grade is not None}


def _likely(model: _Model, squared_limits: Real) -> list[tuple[str, ...]]:
    """The parts whose next grade takes the most off a variance, against the square of its limit,
    at any frequency; in circuit order."""
    groups = model.groups()
    before = model.variances({}).sum(axis=2)
    gain = np.zeros(len(groups))
    for k, refs in enumerate(groups):
        grades = model.grades(refs)
        if grades:
            less = before - model.variances(grades).sum(axis=2)
            gain[k] = float((less / squared_limits[:, None]).max())
    top = np.argsort(-gain, kind="stable")[:CANDIDATES]
    return [groups[k] for k in sorted(top.tolist()) if gain[k] > 0]


def _judged(used: Real) -> Index:
    """Frequencies at which boards are judged: some evenly spread, and those most used."""
    count = used.shape[1]
    even = np.linspace(0, count - 1, min(count, FREQUENCIES // 2)).round().astype(np.intp)
    top = np.argsort(-used.max(axis=0), kind="stable")[: FREQUENCIES // 2]
    return np.unique(np.concatenate([even, top]))


def _tightened(
    kind: str,
    chosen: Iterable[str],
    *,
    model: _Model,
    at: tuple[int, int],
    boards: _LinearBoards,
) -> Tightened | None:
    """What the next grade of some parts gives; None where none of them has one."""
    grades = model.grades(chosen)
    if not grades:
        return None
    error_95_db, limit_share_95 = boards.largest(grades)
    tolerances = {ref: model.circuit.by_ref[ref].tolerance for ref in grades}
    coarsest = max(grades, key=lambda ref: tolerances[ref])
    return Tightened(
        kind=kind,
        refs=tuple(grades),
        tolerance=tolerances[coarsest],
        grade=grades[coarsest],
        spread=float(np.sqrt(model.variances(grades)[at].sum())),
        error_95_db=error_95_db,
        limit_share_95=limit_share_95,
    )


@dataclass(frozen=True, eq=False)
class _LinearBoards:
    """`BOARDS` boards in the linear model, the first that a run with this seed draws; judged at
    the frequencies `kept`."""

    model: _Model
    nominal: ResponseError
    accept: Accept
    seed: int
    kept: Index

    def largest(self, grades: Mapping[str, float]) -> tuple[float, float]:
        """95th percentiles over boards of the largest dB error and of the largest share of a
        limit, some parts at other tolerances."""
        error = self._start + self._moves(grades)
        db = DB_PER_NEPER * np.abs(error.real).max(axis=1)
        deg = np.degrees(np.abs(error.imag).max(axis=1))
        share = np.maximum(db / self.accept.magnitude_db, deg / self.accept.phase_deg)
        return float(np.percentile(db, 95)), float(np.percentile(share, 95))

    @property
    def _start(self) -> Complex:
        kept = self.kept
        magnitude = self.nominal.magnitude_db[kept] / DB_PER_NEPER
        return np.asarray(magnitude + 1j * np.radians(self.nominal.phase_deg[kept]))

    def _moves(self, grades: Mapping[str, float]) -> Complex:
        """How far each board is from the nominal one, shape (boards, kept)."""
        model = self.model
        source = BoardSource(model.circuit, model.population, self.seed, tolerances=grades)
        drawn = source.draw(BOARDS)
        nominal = np.array([p.value for p in model.circuit.passives])
        moved = np.log(drawn.values / nominal) @ model.sensitivities.passives[self.kept].T
        if drawn.gain_bandwidth is not None:
            figures = np.array([a.figures.gain_bandwidth for a in model.circuit.amplifiers])
            slower = 1 - figures / drawn.gain_bandwidth
            moved += slower @ model.sensitivities.gain_bandwidth[self.kept].T
        return np.asarray(moved)
