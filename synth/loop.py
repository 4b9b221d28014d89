"""The loop the board closes: margins and stability of L = P(s) exp(-s delay) H(s).

Negative feedback: the closed loop has the characteristic function 1 + L.  Everything is read
off L on a dense grid of frequencies, where a delay is exact.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import JobError
from synth.evidence import Check
from synth.job import Loop
from synth.nyquist import unstable_poles
from synth.transfer import TransferFunction

__all__ = [
    "LoopBoards",
    "LoopMargins",
    "Percentiles",
    "checked_loop",
    "loop_checks",
    "loop_margins",
    "loop_response",
]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Response = Callable[[Real], Complex]


# An L that tends to a number is there when its imaginary part is below this share of the real one.
REAL = 0.05


@dataclass(frozen=True, kw_only=True)
class LoopMargins:
    """What a loop has in hand; None where there is no crossing.

    Parameters
    ----------
    crossover_hz
        Frequency at which |L| = 1 with the smallest phase margin [Hz].
    phase_margin_deg
        Smallest distance of the phase of L from -180 deg where |L| = 1, within +-180 deg,
        positive in a stable loop [deg].
    gain_margin_db
        How much the gain may change, up or down, until the nearest crossing of -180 deg
        reaches 1, positive in a stable loop; in any other, how much it would have to grow [dB].
    gain_may_fall
        Whether that crossing is met by a gain that falls.
    disk_margin
        1 / max |(S - T) / 2|, S = 1/(1+L), T = L/(1+L): the size of a disk of gains and
        phases that keeps the loop stable (Seiler, Packard, Gahinet 2020, from memory); 0 for
        an unstable one.
    unstable_poles
        Closed-loop poles in the right half-plane, by the Nyquist criterion; None where it is
        not decided: H(s) has a pair of poles on the imaginary axis, of which the board has
        an image beside it, or a delayed L stays above 1.
    """

    crossover_hz: float | None
    phase_margin_deg: float | None
    gain_margin_db: float | None
    gain_may_fall: bool
    disk_margin: float
    unstable_poles: int | None

    @property
    def is_stable(self) -> bool:
        """Whether the closed loop is known to be stable."""
        return self.unstable_poles == 0


@dataclass(frozen=True, kw_only=True)
class Percentiles:
    """Percentiles over boards; None where they fall on boards that have no such number."""

    p5: float | None
    p50: float | None
    p95: float | None


@dataclass(frozen=True, kw_only=True)
class LoopBoards:
    """The loop around each board of a run.

    Parameters
    ----------
    boards, stable, passed
        How many were drawn, how many of them are stable by the Nyquist criterion, and how many
        of these keep the job's limits on the margins.
    low, high
        Clopper-Pearson interval of passed / boards at `confidence`, ratios.
    phase_margin_deg, gain_margin_db, crossover_hz, disk_margin
        Percentiles of what `LoopMargins` says of each board.  A margin without a crossing
        counts as larger than any other, that of an unstable board as negative.
    short_of_phase, short_of_gain
        How many stable boards miss the limit on the phase and on the gain margin.
    """

    boards: int
    stable: int
    passed: int
    low: float
    high: float
    confidence: float
    phase_margin_deg: Percentiles
    gain_margin_db: Percentiles
    crossover_hz: Percentiles
    disk_margin: Percentiles
    short_of_phase: int = 0
    short_of_gain: int = 0

    @property
    def share(self) -> float:
        """Share of the boards that are stable and keep the limits, a ratio."""
        return self.passed / self.boards


def loop_response(loop: Loop, compensator: Response) -> Response:
    """L(j 2 pi f) as a function of frequency [Hz]."""

    def response(frequency_hz: Real) -> Complex:
        delay = np.exp(-2j * np.pi * frequency_hz * loop.delay)
        return np.asarray(
            loop.plant.response(frequency_hz) * delay * compensator(frequency_hz),
            dtype=np.complex128,
        )

    return response


def loop_margins(
    loop: Loop,
    target: TransferFunction,
    compensator: Response | None = None,
    *,
    excess: int = 0,
) -> LoopMargins:
    """Margins of the loop with `compensator` in place of `target` (None: the target itself).

    Parameters
    ----------
    target
        H(s): its poles, with those of the plant, say where to look, and how many of them lie
        in the right half-plane or at the origin.
    compensator
        Response of the board over frequency [Hz].
    excess
        How many poles the board by itself has right of the axis beyond those of H(s).
    """
    response = loop_response(loop, compensator or target.response)
    grid = _grid(loop, target)
    value = response(grid)
    parts = (loop.plant, target)
    poles = unstable_poles(
        parts,
        response,
        grid,
        value,
        delay=loop.delay,
        asked=loop_response(loop, target.response)(grid) if compensator else None,
        excess=excess,
    )
    crossover, phase_margin = _phase_margin(response, grid, value)
    origin = sum(tf.poles_at_origin - tf.zeros_at_origin for tf in parts)
    flat = not loop.delay and sum(tf.relative_degree for tf in parts) == 0
    gain_margin = _gain_margin(
        response, grid, value, finite_at_dc=origin == 0, finite_at_infinity=flat
    )
    falls = gain_margin is not None and gain_margin < 0
    if poles == 0:
        # Either way from a stable loop is a distance from instability.
        phase_margin = None if phase_margin is None else abs(phase_margin)
        gain_margin = None if gain_margin is None else abs(gain_margin)
    return LoopMargins(
        crossover_hz=crossover,
        phase_margin_deg=phase_margin,
        gain_margin_db=gain_margin,
        gain_may_fall=falls,
        disk_margin=_disk_margin(response, grid, value) if not poles else 0.0,
        unstable_poles=poles,
    )


def checked_loop(loop: Loop, target: TransferFunction) -> LoopMargins:
    """Margins of the loop with H(s) itself.

    Raises
    ------
    JobError
        That loop is unstable: no board could be any better than what was asked.  Or it does not
        fall below 1: there is no crossover, and what P and H leave out, where the board's
        op-amps end at the latest, decides whether it is stable (at -1 or below it never is).
    """
    end = _at_infinity(loop, target)
    if abs(end) >= 1:
        raise JobError(
            f"got L = P H that tends to {end:.4g} at high frequencies, where op-amps end and "
            "nothing here says whether the loop is stable; expected a plant with its poles there, "
            "so that L falls below 1",
            key="loop",
        )
    margins = loop_margins(loop, target)
    if margins.unstable_poles:
        poles = margins.unstable_poles
        raise JobError(
            f"got a plant around which H(s) itself leaves the closed loop unstable, with {poles} "
            f"pole{'' if poles == 1 else 's'} in the right half-plane or at the origin; expected "
            "L = P H that is stable with negative feedback",
            key="loop",
        )
    return margins


def _at_infinity(loop: Loop, target: TransferFunction) -> float:
    """What L tends to at high frequencies, but for the delay."""
    parts = (loop.plant, target)
    if sum(tf.relative_degree for tf in parts) > 0:
        return 0.0
    return float(math.prod(tf.numerator[0] / tf.denominator[0] for tf in parts))


def loop_checks(loop: Loop, margins: LoopMargins) -> tuple[Check, ...]:
    """The lines of the verdict for the loop around a board with these margins."""
    unstable = margins.unstable_poles
    stable = Check(
        "closed loop",
        0.0,
        None if unstable is None else float(unstable),
        "unstable poles",
        margins.is_stable,
        "by the Nyquist criterion"
        if unstable is not None
        else "not decided: H(s) has poles on the imaginary axis, or a delayed L stays above 1",
    )
    crossing = "" if margins.crossover_hz is None else f"at {margins.crossover_hz:.4g} Hz"
    return (
        stable,
        _margin_check(
            "phase margin", margins.phase_margin_deg, loop.phase_margin_deg, "deg", crossing
        ),
        _margin_check(
            "gain margin",
            margins.gain_margin_db,
            loop.gain_margin_db,
            "dB",
            "of a gain that falls" if margins.gain_may_fall else "",
        ),
    )


def _margin_check(
    name: str, value: float | None, limit: float | None, unit: str, note: str
) -> Check:
    if value is None:
        return Check(name, limit, None, unit, True, "no crossing")
    return Check.at_least(name, value, limit, unit, note)


def _grid(loop: Loop, target: TransferFunction) -> Real:
    """Six decades beyond every root, dense near lightly damped ones and where the delay turns."""
    factors = [
        f
        for tf in (loop.plant, target)
        for f in (*tf.pole_factors, *tf.zero_factors)
        if f.natural_frequency
    ]
    corners = [f.natural_frequency / (2 * np.pi) for f in factors] or [1.0]
    low, high = min(corners) * 1e-5, max(corners) * 1e5
    points = [np.geomspace(low, high, 400 * round(math.log10(high / low)))]
    for factor in factors:
        if factor.degree == 2 and math.isfinite(factor.q):
            f0 = factor.natural_frequency / (2 * np.pi)
            width = 1 / (2 * max(abs(factor.q), 0.5))
            points.append(f0 * np.exp(np.linspace(-6, 6, 601) * width))
    if loop.delay:
        turn = 1 / loop.delay
        points.append(np.arange(0.02, 12, 0.02) * turn)
    grid = np.unique(np.concatenate(points))
    for factor in (f for f in factors if math.isinf(f.q)):
        # Not on a pole on the imaginary axis, where there is no value.
        grid = grid[np.abs(grid / (factor.natural_frequency / (2 * np.pi)) - 1) > 1e-9]
    return grid


def _disk_margin(response: Response, grid: Real, value: Complex) -> float:
    """1 / max |(1 - L) / (1 + L) / 2|, its maximum sought between the points of the grid too."""

    def inverse(loop: Complex) -> Real:
        return np.asarray(np.abs(2 * (1 + loop) / (1 - loop)))

    best = float(np.min(inverse(value)))
    for _ in range(9):
        k = int(np.argmin(inverse(value)))
        grid = np.geomspace(grid[max(k - 1, 0)], grid[min(k + 1, grid.size - 1)], 33)
        value = response(grid)
        best = min(best, float(np.min(inverse(value))))
    return best


def _bisected(f: Callable[[float], float], low: float, high: float) -> float:
    """Root of `f` between two frequencies with values of opposite sign."""
    from scipy.optimize import brentq

    return float(brentq(f, low, high, xtol=1e-14 * high, rtol=1e-14))


def _crossings(value: Real) -> NDArray[np.intp]:
    """Places after which a function on the grid changes its sign."""
    return np.flatnonzero((value[:-1] < 0) != (value[1:] < 0))


def _phase_margin(
    response: Response, grid: Real, value: Complex
) -> tuple[float | None, float | None]:
    """Crossover frequency with the smallest margin, and the margin."""

    def excess(f: float) -> float:
        return math.log(abs(complex(response(np.array([f]))[0])))

    found: list[tuple[float, float]] = []
    for k in _crossings(np.log(np.abs(value))):
        crossing = _bisected(excess, float(grid[k]), float(grid[k + 1]))
        phase = math.degrees(float(np.angle(-response(np.array([crossing]))[0])))
        found.append((phase, crossing))
    if not found:
        return None, None
    phase, crossing = min(found, key=lambda pair: abs(pair[0]))
    return crossing, phase


def _gain_margin(
    response: Response,
    grid: Real,
    value: Complex,
    *,
    finite_at_dc: bool,
    finite_at_infinity: bool,
) -> float | None:
    """20 log10 of the 1 / |L| nearest to 1 where L is negative and real [dB], DC included, and
    the end of the grid where L tends to a number there."""

    def imaginary(f: float) -> float:
        return float(response(np.array([f]))[0].imag)

    # The size between two points of the grid is between theirs, near enough: only the
    # crossing that may be the nearest to 1 is worth finding exactly.
    k = _crossings(value.imag)
    # Across a pair of poles on the axis both parts change their signs, and that is no crossing.
    k = k[(value.real[k] < 0) & (value.real[k + 1] < 0)]
    size = np.log(np.abs(value[k] * value[k + 1])) / 2
    best = math.inf
    if finite_at_dc and value.real[0] < 0:
        best = math.log(abs(value.real[0]))
    if finite_at_infinity and -value.real[-1] > abs(value.imag[-1]) / REAL:
        end = math.log(abs(value.real[-1]))
        best = min(best, end, key=abs)
    for place, rough in sorted(zip(k, size, strict=True), key=lambda pair: abs(pair[1])):
        if abs(rough) > abs(best) + 0.1:
            break
        crossing = _bisected(imaginary, float(grid[place]), float(grid[place + 1]))
        found = abs(complex(response(np.array([crossing]))[0]))
        if found and abs(math.log(found)) < abs(best):
            best = math.log(found)
    return None if math.isinf(best) else -20 * best / math.log(10)
