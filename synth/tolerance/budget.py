"""The error budget: what the choice of values takes of it, what part tolerance takes, and whose
tighter grade would help most.

Everything is of first order: ln H moves with the ln of each part by its sensitivity, parts are
independent and uniform within their tolerance, standard deviation tolerance / sqrt(3), as in a
run of boards.

The budget is drawn up where it is tightest: of magnitude and phase, at the frequency where
|nominal error| + 2 sigma is the largest share of its limit.  There the mean square error of a
board is (nominal error)^2 + sigma^2, and its two terms are the share of the choice of values
and the share of tolerance.  Each part has a share of sigma^2.

Whose tighter grade helps most is not read off one frequency: some thousand boards are drawn in
the same linear model, each likely part in turn given its next grade on the very same boards,
and the part is named that lowers most the 95th percentile over boards of the largest share of
a limit, magnitude or phase, anywhere in the band.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit, Passive
from synth.evidence import DB_PER_NEPER, ResponseError
from synth.job import Accept
from synth.nodal import NodalProgram
from synth.results import ErrorBudget, Tightened

__all__ = ["GRADES", "error_budget", "next_grade"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

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
    """
    slopes = program.sensitivities(frequency_hz).passives
    parts = circuit.passives
    tolerances = np.array([p.tolerance for p in parts])
    scales = (DB_PER_NEPER, 180 / np.pi)
    limits = (accept.magnitude_db, accept.phase_deg)
    errors = (nominal.magnitude_db, nominal.phase_deg)
    # Variances by part, shape (2, F, P): of magnitude [dB^2] and of phase [deg^2].
    both = zip(scales, (slopes.real, slopes.imag), strict=True)
    variances = np.array([(k * slope * tolerances) ** 2 / 3 for k, slope in both])
    sigma = np.sqrt(variances.sum(axis=2))
    used = np.array(
        [(np.abs(e) + SIGMAS * s) / m for e, s, m in zip(errors, sigma, limits, strict=True)]
    )
    which, place = np.unravel_index(int(np.argmax(used)), used.shape)
    at = variances[which, place]
    boards = _LinearBoards.drawn(
        parts, nominal, slopes, accept=accept, seed=seed, kept=_judged(used)
    )
    before = boards.largest({})
    error, spread = float(errors[which][place]), float(sigma[which, place])

    def tightened(kind: str, chosen: list[int]) -> Tightened | None:
        return _tightened(kind, chosen, parts=parts, variance=at, boards=boards)

    weight = variances / np.square(limits)[:, None, None]
    alone = [tightened("part", [k]) for k in _likely(parts, weight.max(axis=(0, 1)))]
    kinds = [
        tightened(kind, [k for k, p in enumerate(parts) if p.kind == kind and p.tolerance])
        for kind in ("resistor", "capacitor")
    ]
    ranked = sorted(range(len(parts)), key=lambda k: -at[k])
    return ErrorBudget(
        quantity=("magnitude", "phase")[which],
        unit=("dB", "deg")[which],
        frequency_hz=float(frequency_hz[place]),
        limit=limits[which],
        nominal=error,
        spread=spread,
        sigmas=SIGMAS,
        shares=tuple((parts[k].ref, float(at[k] / spread**2)) for k in ranked if at[k] > 0),
        error_95_db=before[0],
        limit_share_95=before[1],
        part=min(filter(None, alone), key=lambda t: t.limit_share_95, default=None),
        kinds=tuple(filter(None, kinds)),
    )


def _likely(parts: tuple[Passive, ...], variance: Real) -> list[int]:
    """The parts whose next grade takes the most off the variance, in circuit order."""
    gain = np.zeros(len(parts))
    for k, part in enumerate(parts):
        grade = next_grade(part.kind, part.tolerance)
        if grade is not None:
            gain[k] = variance[k] * (1 - (grade / part.tolerance) ** 2)
    top = np.argsort(-gain, kind="stable")[:CANDIDATES]
    return sorted(int(k) for k in top if gain[k] > 0)


def _judged(used: Real) -> NDArray[np.intp]:
    """Frequencies at which boards are judged: some evenly spread, and those most used."""
    count = used.shape[1]
    even = np.linspace(0, count - 1, min(count, FREQUENCIES // 2)).round().astype(np.intp)
    top = np.argsort(-used.max(axis=0), kind="stable")[: FREQUENCIES // 2]
    return np.unique(np.concatenate([even, top]))


def _tightened(
    kind: str,
    chosen: list[int],
    *,
    parts: tuple[Passive, ...],
    variance: Real,
    boards: _LinearBoards,
) -> Tightened | None:
    """What the next grade of some parts gives; None where none of them has one."""
    found = {k: next_grade(parts[k].kind, parts[k].tolerance) for k in chosen}
    grades = {k: g for k, g in found.items() if g is not None}
    if not grades:
        return None
    left = variance.copy()
    for k, grade in grades.items():
        left[k] *= (grade / parts[k].tolerance) ** 2
    error_95_db, limit_share_95 = boards.largest(grades)
    coarsest = max(grades, key=lambda k: parts[k].tolerance)
    return Tightened(
        kind=kind,
        refs=tuple(parts[k].ref for k in grades),
        tolerance=parts[coarsest].tolerance,
        grade=grades[coarsest],
        spread=float(np.sqrt(left.sum())),
        error_95_db=error_95_db,
        limit_share_95=limit_share_95,
    )


@dataclass(frozen=True, eq=False)
class _LinearBoards:
    """Boards in the linear model.

    `deviation` (B, P) in units of the tolerances (P,); `slopes` (F, P) complex, errors of ln H
    per ln of a part; `error` (B, F) complex, of each board as it is.
    """

    deviation: Real
    tolerances: Real
    slopes: Complex
    error: Complex
    accept: Accept

    @classmethod
    def drawn(
        cls,
        parts: tuple[Passive, ...],
        nominal: ResponseError,
        slopes: Complex,
        *,
        accept: Accept,
        seed: int,
        kept: NDArray[np.intp],
    ) -> _LinearBoards:
        """`BOARDS` of them, the first that a run of boards with this seed draws."""
        bought = [k for k, p in enumerate(parts) if p.on_board]
        deviation = np.zeros((BOARDS, len(parts)))
        generator = np.random.default_rng(seed)
        deviation[:, bought] = generator.uniform(-1.0, 1.0, (BOARDS, len(bought)))
        tolerances = np.array([p.tolerance for p in parts])
        start = nominal.magnitude_db[kept] / DB_PER_NEPER + 1j * np.radians(nominal.phase_deg[kept])
        slopes = slopes[kept]
        error = start + np.log1p(deviation * tolerances) @ slopes.T
        return cls(deviation, tolerances, slopes, error, accept)

    def largest(self, grades: dict[int, float]) -> tuple[float, float]:
        """95th percentiles over boards of the largest dB error and of the largest share of a
        limit, some parts at other tolerances."""
        chosen = list(grades)
        error = self.error
        if chosen:
            deviation, before = self.deviation[:, chosen], self.tolerances[chosen]
            after = np.array([grades[k] for k in chosen])
            change = np.log1p(deviation * after) - np.log1p(deviation * before)
            error = error + change @ self.slopes[:, chosen].T
        db = DB_PER_NEPER * np.abs(error.real).max(axis=1)
        deg = np.degrees(np.abs(error.imag).max(axis=1))
        share = np.maximum(db / self.accept.magnitude_db, deg / self.accept.phase_deg)
        return float(np.percentile(db, 95)), float(np.percentile(share, 95))
