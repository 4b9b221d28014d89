"""Which decks a design is simulated with: the sweep, and the step and its length.

The pack writes the same texts that were simulated.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from netlist.deck import board_deck, step_deck
from synth.circuit import Circuit
from synth.grid import sweeps
from synth.results import Design
from synth.transfer import TransferFunction

__all__ = ["Decks", "decks_of", "settling_time", "step_duration", "sweep_deck"]

SETTLING = 7.0
"""Time constants until a decay is within 0.1 % of its end."""

SETTLING_OF_EACH_MORE = 2.0
"""Time constants that each further equal pole adds (fits the 0.1 % tails of t^k exp(-t))."""

POINTS_PER_PERIOD = 100.0
"""Of the fastest resonance; with fewer its phase drifts visibly over many periods."""

LONGEST_RINGING = 60.0
"""Periods of the fastest resonance that a step response shows at most."""


@dataclass(frozen=True)
class Decks:
    """Texts of ``board.cir`` and ``step.cir``."""

    board: str
    step: str


def decks_of(design: Design) -> Decks:
    """The decks of a design: AC over its band, and a step of its largest input.

    Raises
    ------
    CircuitError
        A name that SPICE cannot take.
    """
    job = design.job
    board = sweep_deck(design, design.circuit)
    stop = step_duration(
        design.wanted,
        band_hz=job.signal.band_hz,
        step_volts=job.signal.input_peak,
        swing_limit=job.board.swing_limit,
    )
    largest = min(stop / 1000, _fastest_period(design.wanted) / POINTS_PER_PERIOD)
    step = step_deck(
        design.circuit,
        title=job.title,
        supply=job.board.supply,
        step_volts=job.signal.input_peak,
        stop_s=stop,
        largest_step_s=largest,
    )
    return Decks(board, step)


def sweep_deck(design: Design, circuit: Circuit) -> str:
    """The linear deck of a board of the design: AC over its band."""
    whole, *further = sweeps(design.wanted, design.job.signal.band_hz)
    return board_deck(
        circuit,
        title=design.job.title,
        start_hz=whole.start_hz,
        stop_hz=whole.stop_hz,
        points_per_decade=whole.points_per_decade,
        further=further,
    )


def step_duration(
    target: TransferFunction,
    *,
    band_hz: tuple[float, float],
    step_volts: float,
    swing_limit: float,
) -> float:
    """How long a step response should run [s], rounded to two digits.

    Until the slowest poles have settled.  With poles at the origin, until the output would reach
    `swing_limit`; with growing or undamped ones, some of their time constants; neither longer
    than five time constants of the band's lower edge.  Never longer than 60 periods of the
    fastest resonance.
    """
    edge = 5 / (2 * math.pi * band_hz[0])
    damping = [-float(p.real) for p in target.poles]
    growing = [10 / -d for d in damping if d < 0]
    undamped = any(d == 0 for d in damping)
    if target.poles_at_origin:
        stop = min(edge, 1.2 * _time_to(target, swing_limit / step_volts), *growing)
    elif growing or undamped:
        stop = min(edge, *growing) if growing else edge
    else:
        stop = settling_time(target) or edge
    stop = min(stop, LONGEST_RINGING * _fastest_period(target))
    digits = 1 - math.floor(math.log10(stop))
    return round(stop, digits)


def settling_time(target: TransferFunction) -> float | None:
    """When the step response of a stable target is within about 0.1 % of its end [s]; None for
    any other target and one without poles."""
    modes = [-float(p.real) for p in target.poles if p.imag >= 0]
    if not modes or min(modes) <= 0:
        return None
    slow = sum(d < 3 * min(modes) for d in modes)
    return (SETTLING + SETTLING_OF_EACH_MORE * (slow - 1)) / min(modes)


def _time_to(target: TransferFunction, level: float) -> float:
    """When K t^m / m! reaches `level` [s]: the step response of K/s^m, H(s) near s = 0."""
    m = target.poles_at_origin
    slope = abs(float(target.numerator[-1] / target.denominator[-1 - m]))
    return (level * math.factorial(m) / slope) ** (1 / m) if slope else math.inf


def _fastest_period(target: TransferFunction) -> float:
    """Shortest period of any pole pair that rings (Q above 1) [s]; infinite without one."""
    pairs = (p for p in target.poles if abs(p.imag) > 0.866 * abs(p))
    return min((2 * math.pi / abs(float(p.imag)) for p in pairs), default=math.inf)
