"""Standard values for a sketched form: what the search is asked, and what it must keep.

Input: a `Sketch` and the response its output must show.  Output: a `Choice`.  Called by
`synth.design` and `synth.repicking`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.candidates import Sketch
from synth.choosing import DEFAULT_EFFORT, Choice, Level, Task, refine, with_ideal_op_amps
from synth.choosing.model import AROUND_PEAK
from synth.circuit import Cell, Circuit
from synth.job import Job
from synth.nodal import compile_circuit
from synth.peaks import frequencies_of_interest
from synth.transfer import TransferFunction

__all__ = [
    "ValueSearch",
    "level_limits",
    "level_ratios",
    "standard_values",
    "thinned",
    "wanted_of",
]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]
Progress = Callable[[str, int, int], None]

# The search for values sees the response at about this many frequencies.
FREQUENCIES_OF_THE_SEARCH = 200

# And about so many where the grid is denser than elsewhere: below this share of its median step.
FREQUENCIES_ABOUT_SHARP = 60
CLOSE = 0.6

# Share of the search that goes into values as if op-amps were ideal: they are where the search for
# the real ones sets out, and what shows what allowing for the op-amps brings.
UNAWARE_SHARE = 0.5

# What a level may lack of its maximum and still count as its peak.
FLAT = 0.01


def wanted_of(sketch: Sketch, job: Job) -> TransferFunction:
    """What the output net must show: H(s) or -H(s)."""
    return job.target.negated() if sketch.polarity.output_inverted else job.target


def thinned(frequency_hz: Real) -> slice | Index:
    """Places of about `FREQUENCIES_OF_THE_SEARCH` of the frequencies, and of about
    `FREQUENCIES_ABOUT_SHARP` of those that lie closer than the others, about what is sharp."""
    step = max(1, frequency_hz.size // FREQUENCIES_OF_THE_SEARCH)
    apart = np.diff(np.log(frequency_hz))
    close = np.flatnonzero(apart < CLOSE * np.median(apart))
    if not close.size:
        return slice(None, None, step)
    some = close[:: max(1, close.size // FREQUENCIES_ABOUT_SHARP)]
    return np.union1d(np.arange(0, frequency_hz.size, step), some)


def standard_values(
    sketch: Sketch,
    job: Job,
    response: Complex,
    frequency_hz: Real,
    seed: int,
    *,
    effort: int = DEFAULT_EFFORT,
    known: Circuit | None = None,
) -> Choice:
    """Standard values for the sketch's circuit, for the `response` (F,) of its output, better
    than those of `known`."""
    search = ValueSearch(sketch, job, response, frequency_hz, seed, effort)
    return search.task(sketch.circuit).choose(known=known)


@dataclass(frozen=True, eq=False)
class ValueSearch:
    """What a choice of values for one sketch is asked, whatever its op-amps."""

    sketch: Sketch
    job: Job
    response: Complex
    frequency_hz: Real
    seed: int
    effort: int

    def both(self, say: Progress) -> tuple[Choice, Choice]:
        """For the job's op-amps, and as if they were ideal; the one improves on the other.

        What is beyond the usual effort goes into improving on what that gives, so that more is
        never worse.  What the job asks beyond the least error, pairs and few values, is done for
        the first alone.
        """
        usual = min(self.effort, DEFAULT_EFFORT)
        rest = self.effort - usual
        say("values", 0, 2)
        ideal = self.task(with_ideal_op_amps(self.sketch.circuit))
        unaware = replace(ideal, effort=int(UNAWARE_SHARE * usual)).choose()
        say("values", 1, 2)
        task = self.task(self.sketch.circuit)
        choice = replace(task, effort=usual).choose(known=unaware.circuit)
        if rest:
            unaware = _improved(ideal, unaware, int(UNAWARE_SHARE * rest))
            choice = _improved(task, choice, rest)
        return refine(task, choice, self.job.board), unaware

    def task(self, circuit: Circuit) -> Task:
        """What is asked of `circuit`, the sketch's own or one like it, on at most about
        `FREQUENCIES_OF_THE_SEARCH` of the frequencies."""
        few = thinned(self.frequency_hz)
        return Task(
            circuit=circuit,
            target=self.response[few],
            frequency_hz=self.frequency_hz[few],
            accept=self.job.accept,
            level_limits=level_limits(self.sketch, self.job),
            seed=self.seed,
            effort=self.effort,
        )


def _improved(task: Task, known: Choice, effort: int) -> Choice:
    """A choice at least as good as `known`, by other kicks."""
    found = replace(task, seed=task.seed + 1, effort=effort).choose(known=known.circuit)
    # Values that had to leave what the scaling wants kept are no start for ones that need not.
    better = min(found, known, key=lambda choice: choice.certificate.rms)
    return replace(better, looked=known.looked + found.looked)


def level_ratios(sketch: Sketch, circuit: Circuit, frequency_hz: Real) -> dict[str, float]:
    """By block other than the output's: its level in `circuit` over that in the sketch's graph,
    the mean over the frequencies.  The choice of values moves the scales of the states, which
    H(s) does not see."""
    signals = sketch.graph.signals(2j * np.pi * frequency_hz)
    cells = [c for c in circuit.cells if c.kind != "inverter"]
    volts = np.abs(compile_circuit(circuit).solve(frequency_hz, nets=[c.output for c in cells]))
    return {
        cell.block: float(np.exp(np.mean(np.log(volts[:, k] / np.abs(signals[cell.block])))))
        for k, cell in enumerate(cells)
        if cell.block != sketch.graph.output
    }


def level_limits(sketch: Sketch, job: Job) -> dict[str, Level]:
    """For each op-amp output but the board's: where it peaks, how large H(s) makes it there, and
    by what ratio that may rise before it meets the rail or half the slew rate."""
    peaks = sketch.peaks
    grid = frequencies_of_interest(job.target, from_hz=peaks.from_hz)
    signals = sketch.graph.signals(2j * np.pi * grid)
    limits: dict[str, Level] = {}
    for cell in sketch.circuit.cells:
        if cell.output == sketch.circuit.output_net:
            continue
        if cell.block not in signals:  # the inverter of the input: the same gain everywhere
            rising = _input_inverter_may(sketch, job, cell)
            limits[cell.output] = Level(job.signal.band_hz[0], rising)
            continue
        # An inverter has a gain other than -1 where values were chosen before.
        turned = _inverter_gain(sketch.circuit, cell) if cell.kind == "inverter" else 1.0
        volts = job.signal.input_peak * sketch.levels[cell.block] * turned
        rising = min(
            job.board.swing_limit / (volts * peaks.peak[cell.block]),
            job.board.op_amp.slew_rate / 2 / (volts * peaks.rate[cell.block]),
        )
        # An adder may be flat up to where op-amps end: its peak is where the flat part begins.
        size = np.abs(signals[cell.block])
        watch = float(grid[int(np.argmax(size >= (1 - FLAT) * np.max(size)))])
        # One already above its ceiling must not be pushed further; that values cannot bring it
        # below is for the swing check to say.
        near = np.abs(sketch.graph.signals(2j * np.pi * watch * AROUND_PEAK)[cell.block])
        limits[cell.output] = Level(watch, max(rising, 1.0), float(np.max(near)) * turned)
    return limits


def _inverter_gain(circuit: Circuit, cell: Cell) -> float:
    """Size of the gain of an inverter with its ideal values."""
    branches = [circuit.branch(cell, ref) for ref in cell.inputs]
    conductance = sum(1 / sum(p.ideal for p in branch.parts) for branch in branches)
    return circuit.by_ref[cell.feedback].ideal * conductance


def _input_inverter_may(sketch: Sketch, job: Job, cell: Cell) -> float:
    """By what ratio the inverter of the input may rise, or must fall: it can, where the
    resistors it drives can fall with it."""
    circuit = sketch.circuit
    ratio = job.board.swing_limit / (job.signal.input_peak * _inverter_gain(circuit, cell))
    driven = [
        p.ideal
        for p in circuit.bought
        if cell.output in p.nets and p.kind == "resistor" and p.ref != cell.feedback
    ]
    within = min(driven, default=np.inf) * ratio > job.board.resistors.smallest
    return ratio if within else max(ratio, 1.0)
