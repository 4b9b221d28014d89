"""Whether the peaks that are predicted fit between the rails, shown by a sine in ngspice.

The sine has the largest input's size and the frequency at which the op-amp output that uses most
of its swing has its peak.  Op-amps saturate and slew; an output that clips falls short of what
the linear analysis says of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from netlist.deck import sine_deck
from netlist.ngspice import TransientResult
from synth.evidence import Check
from synth.nodal import compile_circuit
from synth.results import Design, Swing

__all__ = ["SineRun", "sine_check", "sine_run"]

POINTS_PER_PERIOD = 100
RISE_PERIODS = 8.0
LAST_PERIODS = 2.0
"""Of which the size is read."""

LONGEST_PERIODS = 100.0
"""A resonance that needs more periods to settle is not run."""

NEAR = 3.0
"""Modes within this factor of the frequency are stirred by the rise, and must die away."""

DECAY = 7.0
"""Time constants until 0.1 % is left."""

AS_DC = 30.0
"""A peak at DC is shown at the lowest corner divided by this."""

SLEW_SHARE = 0.5
"""A frequency at which more of the slew rate is needed shows slewing rather than clipping."""

LARGEST_SHORTFALL = 2.0
"""Of an output's size [%]; a sine clipped at 98 % of its peak loses that."""


@dataclass(frozen=True, kw_only=True)
class SineRun:
    """A sine and what every op-amp output is expected to make of it.

    Parameters
    ----------
    amplifier, net
        The op-amp that uses most of its swing.
    frequency_hz, input_peak
        Of the sine [Hz], [V].
    expected
        Peak of every op-amp output by net, from the linear nodal analysis [V].
    deck
        The deck to run.
    """

    amplifier: str
    net: str
    frequency_hz: float
    input_peak: float
    expected: dict[str, float]
    deck: str


def sine_run(design: Design, *, input_peak: float | None = None) -> SineRun | None:
    """The run for a design; `input_peak` [V] stands in for that of the job.

    None where the peaks are predicted to clip, or where a sine does not become steady: an
    undamped or growing mode near it, or one that takes too long.
    """
    hottest = max(design.swings, key=lambda s: s.peak / s.peak_limit, default=None)
    if hottest is None or (input_peak is None and hottest.peak > hottest.peak_limit):
        return None
    peak = design.job.signal.input_peak if input_peak is None else input_peak
    frequency = _frequency(design, hottest)
    periods = _settling_periods(design, frequency)
    if periods is None:
        return None
    rise, stop = RISE_PERIODS / frequency, (RISE_PERIODS + periods + LAST_PERIODS) / frequency
    return SineRun(
        amplifier=hottest.amplifier,
        net=hottest.net,
        frequency_hz=frequency,
        input_peak=peak,
        expected={net: peak * size for net, size in _sizes(design, frequency).items()},
        deck=sine_deck(
            design.circuit,
            title=design.job.title,
            supply=design.job.board.supply,
            peak_volts=peak,
            frequency_hz=frequency,
            rise_s=rise,
            stop_s=stop,
            kept_s=LAST_PERIODS / frequency,
            largest_step_s=1 / (POINTS_PER_PERIOD * frequency),
        ),
    )


def sine_check(run: SineRun, found: TransientResult) -> Check:
    """How far the output that falls short most is below its expected size [%]."""
    largest = max(run.expected.values())
    short = {
        net: 100 * (1 - float(np.ptp(found.voltages[net])) / 2 / size)
        for net, size in run.expected.items()
        if size > 1e-3 * largest
    }
    net = max(short, key=lambda name: short[name])
    note = f"at {net}, {run.input_peak:.4g} V at {run.frequency_hz:.4g} Hz, where {run.net} peaks"
    value = max(short[net], 0.0)
    return Check.at_most("clipping of the largest sine", value, LARGEST_SHORTFALL, "%", note)


def _sizes(design: Design, frequency_hz: float) -> dict[str, float]:
    """Volts at every op-amp output per volt of the input."""
    nets = [a.output for a in design.circuit.amplifiers]
    found = np.abs(compile_circuit(design.circuit).solve([frequency_hz], nets=nets)[0])
    return dict(zip(nets, found.tolist(), strict=True))


def _frequency(design: Design, hottest: Swing) -> float:
    """Where the hottest output has its peak; within the band where op-amps would slew there."""
    peak = design.job.signal.input_peak
    at = hottest.peak_hz
    if at == 0:
        corners = [f.natural_frequency for f in design.wanted.pole_factors if f.natural_frequency]
        at = min(corners, default=2 * math.pi) / (2 * math.pi * AS_DC)
    if at is not None:
        rate = 2 * math.pi * at * peak * max(_sizes(design, at).values())
        if rate <= SLEW_SHARE * hottest.slew_limit:
            return at
    found = np.abs(compile_circuit(design.circuit).solve(design.frequency_hz, nets=[hottest.net]))
    return float(design.frequency_hz[int(np.argmax(found[:, 0]))])


def _settling_periods(design: Design, frequency_hz: float) -> float | None:
    """How many periods the modes near a frequency take to die away; None for too many."""
    w = 2 * math.pi * frequency_hz
    poles = compile_circuit(design.circuit).poles()
    poles = poles[np.isfinite(poles)]
    if any(p.real > 0 for p in (*poles, *design.wanted.poles)):
        return None
    near = [p for p in poles if w / NEAR < abs(p) < w * NEAR]
    damping = min((-float(p.real) for p in near), default=math.inf)
    periods = DECAY / damping * frequency_hz
    return max(periods, 2.0) if periods < LONGEST_PERIODS else None
