"""The response error as a small linear least-squares model in the logarithms of the parts.

ln H is close to linear in the ln of the parts: coefficients are products of powers of R and C,
and near the target ln H is linear in their logarithms; along the free scales of states and
impedances it does not move at all.  With the Jacobian J of ln H by the adjoint, weighted and
split into real and imaginary parts, the mean square error is |J d + r|^2, d = ln p - ln p_ref.
A singular value decomposition keeps the few directions that matter.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.evidence import DB_PER_NEPER
from synth.job import Accept
from synth.nodal import NodalProgram

__all__ = [
    "AROUND_PEAK",
    "Ceilings",
    "Goal",
    "Level",
    "LevelLimits",
    "LinearModel",
    "compensation",
]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Singular values below this share of the largest are directions that do not move ln H.
NEGLIGIBLE = 1e-9


# Residuals are made up for along directions that move ln H by more than this per unit of ln p;
# weaker ones (what the finite gain of the op-amps lets through) would need huge changes.
RIDGE = 3e-3


def compensation(matrix: Real, ridge: float = RIDGE) -> Real:
    """G so that d = -G r makes |matrix d + r|^2 + (ridge |d|)^2 least, shape (P, K)."""
    left, singular, right = np.linalg.svd(matrix, full_matrices=False)
    return np.asarray((right.T * (singular / (singular**2 + ridge**2))) @ left.T)


@dataclass(frozen=True, eq=False)
class Goal:
    """The response the output must show, and how an error of it counts.

    Parameters
    ----------
    target
        Shape (F,), nowhere zero.
    frequency_hz
        Shape (F,).
    magnitude_weight, phase_weight
        Factors of the real and the imaginary part of the error of ln H.
    """

    target: Complex
    frequency_hz: Real
    magnitude_weight: float = 1.0
    phase_weight: float = 1.0

    @classmethod
    def within(cls, target: Complex, frequency_hz: Real, accept: Accept) -> Goal:
        """Magnitude and phase weighted by the inverse of their limits, so that equal shares of
        a limit count the same; the mean of the squared weights is 1."""
        magnitude = DB_PER_NEPER / accept.magnitude_db
        phase = 180 / np.pi / accept.phase_deg
        scale = float(np.sqrt(2 / (magnitude**2 + phase**2)))
        return cls(target, frequency_hz, magnitude * scale, phase * scale)

    def split(self, error: Complex) -> Real:
        """Errors of ln H, shape (..., F), as weighted real and imaginary parts, (..., 2 F),
        scaled so that the sum of squares is the mean square over frequency."""
        parts = (self.magnitude_weight * error.real, self.phase_weight * error.imag)
        return np.asarray(np.concatenate(parts, axis=-1) / np.sqrt(self.frequency_hz.size))

    def mean_squares(self, program: NodalProgram, values: Real) -> Real:
        """Weighted mean square of the error of ln H of each board, values (boards, P)."""
        response = program.solve(self.frequency_hz, values=values)
        return np.asarray(np.sum(self.split(np.log(response / self.target)) ** 2, axis=-1))


@dataclass(frozen=True, eq=False)
class LinearModel:
    """mean |error of ln H|^2 = |matrix d + offset|^2 + floor, d = ln p - reference.

    Attributes
    ----------
    matrix, offset
        Shapes (K, P) and (K,), K at most the rank.
    floor
        What no change of values removes.
    reference
        ln of the values it is linear about, shape (P,).
    """

    matrix: Real
    offset: Real
    floor: float
    reference: Real

    @classmethod
    def about(
        cls,
        program: NodalProgram,
        values: Real,
        goal: Goal,
        *,
        jacobian: NodalProgram | None = None,
    ) -> LinearModel:
        """The model about `values` (P,).

        The error is that of `program`; the slopes are those of `jacobian` where given, such as
        the same circuit with ideal op-amps, whose rank is that of what the parts really set.
        """
        found = (jacobian or program).sensitivities(goal.frequency_hz, values=values)
        response = found.response
        if jacobian is not None:
            response = program.solve(goal.frequency_hz, values=values)
        residual = goal.split(np.log(response / goal.target))
        slopes = goal.split(found.passives.T).T
        left, singular, right = np.linalg.svd(slopes, full_matrices=False)
        keep = singular > NEGLIGIBLE * singular[0]
        offset = left[:, keep].T @ residual
        floor = max(float(residual @ residual - offset @ offset), 0.0)
        return cls(singular[keep, None] * right[keep], offset, floor, np.log(values))

    def residual(self, logs: Real) -> Real:
        """matrix d + offset at ln p = `logs`, shape (K,)."""
        return self.matrix @ (logs - self.reference) + self.offset

    def without(self, parts: NDArray[np.intp]) -> LinearModel:
        """The model in which some parts take up whatever they can, whatever the others do."""
        left, singular, _ = np.linalg.svd(self.matrix[:, parts], full_matrices=False)
        taken = left[:, singular > RIDGE]
        return replace(
            self,
            matrix=self.matrix - taken @ (taken.T @ self.matrix),
            offset=self.offset - taken @ (taken.T @ self.offset),
        )

    def mean_square(self, logs: Real) -> float:
        """Predicted mean square error at ln p = `logs`."""
        residual = self.residual(logs)
        return float(residual @ residual) + self.floor


# How far (a ratio) a level may fall below where the scaling put it.  The response does not show
# it, but noise and offsets do.
LOWEST_FALL = 0.6

# An output that moves faster than this with a part, ln by ln, hangs on a small difference: its
# level is no free scale, and has no floor.
FIRM_SLOPE = 2.5

# A sharp peak moves with the values: it is looked for this far around where it was, and this
# much room is left for what falls between.
AROUND_PEAK = np.linspace(0.98, 1.02, 5)
PEAK_MARGIN = 0.01

# Where an output hangs on a small difference, its peak may come to lie somewhere else: so many
# frequencies are watched from this factor below the lowest peak to as far above the highest.
WATCHED_BETWEEN = 40
BEYOND_PEAKS = 10.0


@dataclass(frozen=True)
class Level:
    """How large the gain from the input to an op-amp output may become.

    Parameters
    ----------
    peak_hz
        Frequency of its peak [Hz].
    may_rise
        By what ratio it may rise, or must fall where that is below 1.
    gain
        From where: the largest that it is meant to be at `AROUND_PEAK` times `peak_hz`, a ratio.
        What the op-amps make of ideal values may be above that, and does not count.  None: what it
        is with the ideal values.
    """

    peak_hz: float
    may_rise: float
    gain: float | None = None


@dataclass(frozen=True, eq=False)
class Ceilings:
    """Between which bounds the gain to each op-amp output stays, at the frequency of its peak.

    `nets` with `peak_hz` (U,) [Hz], `highest` and `lowest` (U,), ratios.
    """

    nets: tuple[str, ...]
    peak_hz: Real
    highest: Real
    lowest: Real

    @classmethod
    def of(
        cls, program: NodalProgram, values: Real, levels: Mapping[str, Level]
    ) -> Ceilings | None:
        """From what each output may do, `values` (P,) being the ideal ones.  None may fall below
        `LOWEST_FALL` of what it is, or of its ceiling where that is lower, unless it hangs on a
        small difference."""
        if not levels:
            return None
        peak_hz = np.array([level.peak_hz for level in levels.values()])
        ratios = np.array([level.may_rise for level in levels.values()])
        # One that may not rise at all keeps the room that the choice of values takes by itself.
        roomy = np.maximum(ratios * (1 - PEAK_MARGIN), 1 + PEAK_MARGIN)
        ratios = np.where(ratios >= 1, roomy, ratios)
        found = cls(tuple(levels), peak_hz, ratios, LOWEST_FALL * np.minimum(ratios, 1.0))
        gains = found._gains(program, values[None, :])[0]
        firm = np.max(np.abs(found._slopes(program, values)), axis=1) <= FIRM_SLOPE
        # Outputs are watched elsewhere too, where an integrator is larger: both by the same ratio.
        near = found._near_peaks(program, values)
        meant = np.array([np.nan if m.gain is None else m.gain for m in levels.values()])
        base = gains * np.where(np.isnan(meant), 1.0, meant / near)
        lowest = firm * found.lowest * np.minimum(gains, base)
        return replace(found, highest=found.highest * base, lowest=lowest)

    def raised(self, program: NodalProgram, values: Real) -> Ceilings:
        """The same, but that no output must be below what it is with `values` (P,)."""
        gains = self._gains(program, values[None, :])[0]
        return replace(self, highest=np.maximum(self.highest, gains * (1 + PEAK_MARGIN)))

    def without_floors(self) -> Ceilings:
        """The same ceilings, with every level free to fall."""
        return replace(self, lowest=np.zeros(self.lowest.size))

    def _slopes(self, program: NodalProgram, values: Real) -> Real:
        """d ln(gain) / d ln(part) of each output at its peak, shape (U, P)."""
        return np.array(
            [
                program.sensitivities([peak_hz], values=values, net=net).passives[0].real
                for net, peak_hz in zip(self.nets, self.peak_hz, strict=True)
            ]
        )

    def _near_peaks(self, program: NodalProgram, values: Real) -> Real:
        """Largest gain to each output around its own peak at `values` (P,), shape (U,)."""
        around = np.multiply.outer(AROUND_PEAK, self.peak_hz)
        gains = np.abs(program.solve(around.ravel(), values=values, nets=self.nets))
        return np.asarray(np.diagonal(gains.reshape(*around.shape, -1).max(axis=0)))

    def _gains(self, program: NodalProgram, values: Real) -> Real:
        """Largest gain to each output around the peaks of all and at a few frequencies between
        and beyond, values (boards, P), shape (boards, U)."""
        around = np.multiply.outer(AROUND_PEAK, np.unique(self.peak_hz)).ravel()
        low, high = np.min(around) / BEYOND_PEAKS, np.max(around) * BEYOND_PEAKS
        watched = np.concatenate([around, np.geomspace(low, high, WATCHED_BETWEEN)])
        gains = program.solve(watched, values=values, nets=self.nets)
        return np.asarray(np.abs(gains).max(axis=1))

    def keep(self, program: NodalProgram, values: Real) -> NDArray[np.bool_]:
        """Which boards stay within every bound, values (boards, P), shape (boards,)."""
        gains = self._gains(program, values)
        below = gains <= self.highest * (1 + 1e-9)
        above = gains >= self.lowest * (1 - 1e-9)
        return np.asarray(np.all(below & above, axis=1))

    def about(self, program: NodalProgram, values: Real) -> LevelLimits:
        """The same as linear limits about `values` (P,)."""
        rows = self._slopes(program, values)
        gains = self._gains(program, values[None, :])[0]
        rise = np.log(self.highest / gains)
        fall = np.log(gains) - np.log(np.maximum(self.lowest, np.finfo(float).tiny))
        return LevelLimits(
            np.concatenate([rows, -rows]), np.concatenate([rise, fall]), np.log(values)
        )


@dataclass(frozen=True, eq=False)
class LevelLimits:
    """How far the op-amp outputs may rise and fall: matrix (ln p - reference) <= slack.

    `matrix` (2 U, P) holds the sensitivities of the ln of each output's gain at the frequency
    of its peak, then their negatives; `slack` (2 U,) the ln of how far it may rise, then fall.
    """

    matrix: Real
    slack: Real
    reference: Real

    def excess(self, logs: Real) -> Real:
        """By how much the ln of each output's gain passes its bounds, negative within them."""
        return np.asarray(self.matrix @ (logs - self.reference) - self.slack)

    def hold(self, logs: Real) -> bool:
        """Whether every output stays within its bounds at ln p = `logs`."""
        return bool(np.all(self.excess(logs) <= 1e-9))
