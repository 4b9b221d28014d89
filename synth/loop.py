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

from synth.evidence import Check
from synth.job import Loop
from synth.transfer import TransferFunction

__all__ = ["LoopMargins", "loop_checks", "loop_margins", "loop_response"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Response = Callable[[Real], Complex]


@dataclass(frozen=True, kw_only=True)
class LoopMargins:
    """What a loop has in hand; None where there is no crossing.

    Parameters
    ----------
    crossover_hz
        Frequency at which |L| = 1 with the smallest phase margin [Hz].
    phase_margin_deg
        Smallest distance of the phase of L from -180 deg where |L| = 1, signed, within
        +-180 deg [deg].
    gain_margin_db
        How much the gain may grow until a crossing of -180 deg reaches 1 [dB].
    disk_margin
        1 / max |(S - T) / 2|, S = 1/(1+L), T = L/(1+L): the size of a disk of gains and
        phases that keeps the loop stable (Seiler, Packard, Gahinet 2020, from memory).
    unstable_poles
        Closed-loop poles in the right half-plane, by the Nyquist criterion; None where L has
        a pair of poles on the imaginary axis.
    """

    crossover_hz: float | None
    phase_margin_deg: float | None
    gain_margin_db: float | None
    disk_margin: float
    unstable_poles: int | None

    @property
    def is_stable(self) -> bool:
        """Whether the closed loop is known to be stable."""
        return self.unstable_poles == 0


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
    loop: Loop, target: TransferFunction, compensator: Response | None = None
) -> LoopMargins:
    """Margins of the loop with `compensator` in place of `target` (None: the target itself).

    Parameters
    ----------
    target
        H(s): its poles, with those of the plant, say where to look, and how many of them lie
        in the right half-plane or at the origin.
    compensator
        Response of the board over frequency [Hz].
    """
    response = loop_response(loop, compensator or target.response)
    grid = _grid(loop, target)
    value = response(grid)
    crossover, phase_margin = _phase_margin(response, grid, value)
    return LoopMargins(
        crossover_hz=crossover,
        phase_margin_deg=phase_margin,
        gain_margin_db=_gain_margin(response, grid, value),
        disk_margin=float(1 / np.max(np.abs((1 - value) / (1 + value) / 2))),
        unstable_poles=_unstable_poles(loop, target, value),
    )


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
        else "not decided: L has a pair of poles on the imaginary axis",
    )
    crossing = "" if margins.crossover_hz is None else f"at {margins.crossover_hz:.4g} Hz"
    return (
        stable,
        _margin_check(
            "phase margin", margins.phase_margin_deg, loop.phase_margin_deg, "deg", crossing
        ),
        _margin_check("gain margin", margins.gain_margin_db, loop.gain_margin_db, "dB", ""),
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
    return np.unique(np.concatenate(points))


def _bisected(f: Callable[[float], float], low: float, high: float) -> float:
    """Root of `f` between two frequencies with values of opposite sign."""
    from scipy.optimize import brentq

    return float(brentq(f, low, high, xtol=1e-14 * high, rtol=1e-14))


def _phase_margin(
    response: Response, grid: Real, value: Complex
) -> tuple[float | None, float | None]:
    """Crossover frequency with the smallest margin, and the margin."""

    def excess(f: float) -> float:
        return math.log(abs(complex(response(np.array([f]))[0])))

    size = np.log(np.abs(value))
    found: list[tuple[float, float]] = []
    for k in np.flatnonzero(size[:-1] * size[1:] < 0):
        crossing = _bisected(excess, float(grid[k]), float(grid[k + 1]))
        phase = math.degrees(float(np.angle(-response(np.array([crossing]))[0])))
        found.append((phase, crossing))
    if not found:
        return None, None
    phase, crossing = min(found, key=lambda pair: abs(pair[0]))
    return crossing, phase


def _gain_margin(response: Response, grid: Real, value: Complex) -> float | None:
    """20 log10 of the smallest 1 / |L| > 1 where L is negative and real."""

    def imaginary(f: float) -> float:
        return float(response(np.array([f]))[0].imag)

    # The size between two points of the grid is between theirs, near enough: only the
    # crossing that may be the largest below 1 is worth finding exactly.
    k = np.flatnonzero((value.imag[:-1] * value.imag[1:] < 0) & (value.real[:-1] < 0))
    size = np.sqrt(np.abs(value[k] * value[k + 1]))
    best: float | None = None
    for place in k[np.argsort(-size)]:
        if best is not None and np.max(np.abs(value[place : place + 2])) < 0.9 * best:
            break
        crossing = _bisected(imaginary, float(grid[place]), float(grid[place + 1]))
        found = abs(complex(response(np.array([crossing]))[0]))
        if 0 < found < 1 and (best is None or found > best):
            best = found
    return None if best is None else -20 * math.log10(best)


def _unstable_poles(loop: Loop, target: TransferFunction, value: Complex) -> int | None:
    """Closed-loop poles in the right half-plane, from the turning of 1 + L.

    A polynomial of degree n with Z roots in the right half-plane turns by (n - 2 Z) pi/2 from
    w = 0 to infinity, and one with P there and m at the origin by (n - m - 2 P) pi/2 from
    0+; 1 + L is the ratio of the closed to the open loop's, so
    Z = P + m/2 - turn / pi.  A delay adds no poles of its own to a strictly proper L.
    """
    poles = [p for tf in (loop.plant, target) for f in tf.pole_factors for p in f.roots]
    if any(p.real == 0 and p.imag != 0 for p in poles):
        return None
    right = sum(p.real > 0 for p in poles)
    origin = sum(p == 0 for p in poles)
    turn = float(np.sum(np.angle((1 + value[1:]) / (1 + value[:-1]))))
    return round(right + origin / 2 - turn / math.pi)
