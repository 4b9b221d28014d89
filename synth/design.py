"""The one function that runs the stages, from a job to a design.

::

    Job -> target -> form -> block graph -> signs -> levels -> circuit -> standard values
        -> tolerance, noise, swing, drift -> Design

Everything here is computed; the simulator's opinion is asked for outside.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.allowance import op_amp_allowance
from synth.candidates import Sketch, choose_form
from synth.choosing import DEFAULT_EFFORT, Choice, Task, refine, with_ideal_op_amps
from synth.choosing.supply import allotted
from synth.circuit import Cell, Circuit
from synth.errors import JobError
from synth.evidence import Check, response_error
from synth.graph import BlockGraph
from synth.grid import judging_frequencies
from synth.job import Job
from synth.limits import drifts, swing_checks, swings
from synth.loop import loop_checks, loop_margins
from synth.nodal import compile_circuit
from synth.peaks import frequencies_of_interest
from synth.results import Candidate, Design, LoopResult, NoiseResult, Swing, ToleranceResult
from synth.tolerance import error_budget, run_boards

__all__ = ["DEFAULT_BOARDS", "DEFAULT_SEED", "compare_forms", "design", "level_limits"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Progress = Callable[[str, int, int], None]

# The search for values sees the response at about this many frequencies.
FREQUENCIES_OF_THE_SEARCH = 200

# What a level may lack of its maximum and still count as its peak.
FLAT = 0.01

# 50 times a stray of 2 pF.
SMALL_CAPACITOR = 100e-12

DEFAULT_BOARDS = 1000
DEFAULT_SEED = 1


def compare_forms(job: Job) -> tuple[str, tuple[Candidate, ...]]:
    """The form `design` would take, and every form considered.

    Raises
    ------
    RealizationError
        No form fits.
    """
    sketch, candidates = choose_form(job, judging_frequencies(job.target, job.signal.band_hz))
    return sketch.form, candidates


def design(
    job: Job,
    *,
    boards: int = DEFAULT_BOARDS,
    seed: int = DEFAULT_SEED,
    effort: int = 1,
    progress: Progress | None = None,
) -> Design:
    """Carry a job through every stage.

    Parameters
    ----------
    boards
        How many boards the tolerance run draws, at least 1.
    seed
        Of the choice of values and of the boards; the same seed gives the same design.
    effort
        Multiple of the default work that the search for values is given, at least 1.
    progress
        Called with the stage's name, and how much of how much of it is done.

    Raises
    ------
    JobError, RealizationError
        The job contradicts itself, or no circuit within its rules exists.
    """
    if effort < 1:
        raise JobError(f"got the effort {effort}, expected 1 or more", key="effort")
    say = progress or (lambda stage, done, total: None)
    frequency = judging_frequencies(job.target, job.signal.band_hz)
    sketch, candidates = choose_form(
        job, frequency, progress=lambda done, total: say("forms", done, total)
    )
    wanted = job.target.negated() if sketch.polarity.output_inverted else job.target
    response = wanted.response(frequency)
    search = _Search(sketch, job, response, frequency, seed, effort * DEFAULT_EFFORT)
    choice, unaware = search.both(say)
    circuit = allotted(choice.circuit)
    program = compile_circuit(circuit)
    tolerance = run_boards(
        program,
        circuit,
        response,
        frequency,
        accept=job.accept,
        boards=boards,
        seed=seed,
        progress=lambda done, total: say("boards", done, total),
    )
    say("limits", 0, 1)
    swing = swings(circuit, wanted, job)
    loop = _loop(job, circuit, inverted=sketch.polarity.output_inverted)
    nominal = response_error(program.solve(frequency), response)
    return Design(
        job=job,
        form=sketch.form,
        inverted=sketch.polarity.output_inverted,
        wanted=wanted,
        graph=_as_chosen(sketch, circuit, frequency),
        circuit=circuit,
        frequency_hz=frequency,
        nominal=nominal,
        nearest=response_error(compile_circuit(choice.nearest).solve(frequency), response),
        tolerance=tolerance,
        noise=_noise(circuit, frequency),
        swings=swing,
        drifts=drifts(circuit),
        candidates=candidates,
        checks=_checks(job, circuit, tolerance, swing, loop),
        offset=_offset(circuit),
        certificate=choice.certificate,
        allowance=op_amp_allowance(circuit, unaware.circuit, response, frequency),
        budget=error_budget(program, circuit, nominal, frequency, accept=job.accept, seed=seed),
        effort=effort,
        loop=loop,
        notices=(*job.notices, *choice.notices, *_notices(circuit, job, swing)),
    )


@dataclass(frozen=True, eq=False)
class _Search:
    """What a choice of values for one sketch is asked, whatever its op-amps."""

    sketch: Sketch
    job: Job
    response: Complex
    frequency_hz: Real
    seed: int
    effort: int

    def both(self, say: Progress) -> tuple[Choice, Choice]:
        """For the job's op-amps, and as if they were ideal; the one improves on the other.

        What the job asks beyond the least error, pairs and few values, is done for the first
        alone.
        """
        say("values", 0, 2)
        unaware = self.task(with_ideal_op_amps(self.sketch.circuit)).choose()
        say("values", 1, 2)
        task = self.task(self.sketch.circuit)
        choice = refine(task, task.choose(known=unaware.circuit), self.job.board)
        return choice, unaware

    def task(self, circuit: Circuit) -> Task:
        """Standard values for `circuit`, the sketch's own or one like it, on at most about
        `FREQUENCIES_OF_THE_SEARCH` of the frequencies."""
        count = self.frequency_hz.size
        few = slice(None, None, max(1, count // FREQUENCIES_OF_THE_SEARCH))
        return Task(
            circuit=circuit,
            target=self.response[few],
            frequency_hz=self.frequency_hz[few],
            accept=self.job.accept,
            level_limits=level_limits(self.sketch, self.job),
            seed=self.seed,
            effort=self.effort,
        )


def _checks(
    job: Job,
    circuit: Circuit,
    tolerance: ToleranceResult,
    swing: tuple[Swing, ...],
    loop: LoopResult | None,
) -> tuple[Check, ...]:
    """Every predicted line of the verdict."""
    names = {c.amplifier: _cell_name(circuit, c.amplifier) for c in circuit.cells}
    return (
        _yield_check(tolerance, job),
        *(loop_checks(job.loop, loop.nominal) if job.loop and loop else ()),
        *swing_checks(swing, names),
    )


def _as_chosen(sketch: Sketch, circuit: Circuit, frequency_hz: Real) -> BlockGraph:
    """The sketch's graph at the levels the chosen values give: the choice moves the scales of
    the states, which H(s) does not see."""
    signals = sketch.graph.signals(2j * np.pi * frequency_hz)
    cells = [c for c in circuit.cells if c.kind != "inverter"]
    volts = np.abs(compile_circuit(circuit).solve(frequency_hz, nets=[c.output for c in cells]))
    levels = {
        cell.block: float(np.exp(np.mean(np.log(volts[:, k] / np.abs(signals[cell.block])))))
        for k, cell in enumerate(cells)
        if cell.block != sketch.graph.output
    }
    return sketch.graph.rescaled(levels)


def _loop(job: Job, circuit: Circuit, *, inverted: bool) -> LoopResult | None:
    """Margins of the job's loop; an inverted board is taken to be inverted once more."""
    if job.loop is None:
        return None
    program = compile_circuit(circuit)
    sign = -1.0 if inverted else 1.0
    return LoopResult(
        target=loop_margins(job.loop, job.target),
        nominal=loop_margins(job.loop, job.target, lambda f: sign * program.solve(f)),
    )


def level_limits(sketch: Sketch, job: Job) -> dict[str, tuple[float, float]]:
    """For each op-amp output but the board's: where it peaks [Hz], and by what ratio the peak
    may rise before it meets the rail or half the slew rate."""
    peaks = sketch.peaks
    grid = frequencies_of_interest(job.target, from_hz=peaks.from_hz)
    signals = sketch.graph.signals(2j * np.pi * grid)
    limits: dict[str, tuple[float, float]] = {}
    for cell in sketch.circuit.cells:
        if cell.output == sketch.circuit.output_net:
            continue
        if cell.block not in signals:  # the inverter of the input: the same gain everywhere
            limits[cell.output] = (job.signal.band_hz[0], _input_inverter_may(sketch, job, cell))
            continue
        volts = job.signal.input_peak * sketch.levels[cell.block]
        rising = min(
            job.board.swing_limit / (volts * peaks.peak[cell.block]),
            job.board.op_amp.slew_rate / 2 / (volts * peaks.rate[cell.block]),
        )
        # An adder may be flat up to where op-amps end: its peak is where the flat part begins.
        size = np.abs(signals[cell.block])
        watch = float(grid[int(np.argmax(size >= (1 - FLAT) * np.max(size)))])
        # One already above its ceiling must not be pushed further; that values cannot bring it
        # below is for the swing check to say.
        limits[cell.output] = (watch, max(rising, 1.0))
    return limits


def _input_inverter_may(sketch: Sketch, job: Job, cell: Cell) -> float:
    """By what ratio the inverter of the input may rise, or must fall: it can, where the
    resistors it drives can fall with it."""
    circuit = sketch.circuit
    (source,) = (circuit.by_ref[r].ideal for r in cell.inputs)
    feedback = circuit.by_ref[cell.feedback].ideal
    ratio = job.board.swing_limit / (job.signal.input_peak * feedback / source)
    driven = [
        p.ideal
        for p in circuit.bought
        if cell.output in p.nets and p.kind == "resistor" and p.ref != cell.feedback
    ]
    within = min(driven, default=np.inf) * ratio > job.board.resistors.smallest
    return ratio if within else max(ratio, 1.0)


def _notices(circuit: Circuit, job: Job, swing: tuple[Swing, ...]) -> tuple[str, ...]:
    """What the user should know of the design itself."""
    said: list[str] = []
    stray = [p for p in circuit.bought if p.kind == "capacitor" and p.value < SMALL_CAPACITOR]
    if stray:
        refs = ", ".join(p.ref for p in stray)
        said.append(
            f"{refs}: below {SMALL_CAPACITOR * 1e12:.0f} pF strays of a picofarad or two count "
            "(common practice: at least 50 times the stray)"
        )
    fast = [s for s in swing if s.slew > s.slew_limit / 2]
    if fast:
        refs = ", ".join(s.amplifier for s in fast)
        said.append(
            f"{refs}: the output needs more than half the op-amp's slew rate at the upper edge "
            "of the band (common practice: a margin of two)"
        )
    if job.target.poles_at_origin:
        said.append(
            f"H(s) has a pole at s = 0: below {job.signal.band_hz[0]:.4g} Hz, the lower edge of "
            "the band, its signals grow without bound, so peaks are taken from there upward; on "
            "the bench the board has no operating point of its own outside its loop"
        )
    if any(p.q < 0 or p.roots[0].real > 0 for p in job.target.pole_factors):
        said.append(
            "H(s) is unstable by itself: peaks are those of its response to steady sines, and "
            "the board saturates unless a loop around it holds it"
        )
    return tuple(said)


def _cell_name(circuit: Circuit, amplifier: str) -> str:
    cell = circuit.cell_of(amplifier)
    if cell is None:
        return amplifier
    return f"inverter of {cell.block}" if cell.kind == "inverter" else cell.block


def _yield_check(tolerance: ToleranceResult, job: Job) -> Check:
    limit = job.accept.yield_share
    note = (
        f"{tolerance.passed} of {tolerance.boards} boards, "
        f"{100 * tolerance.low:.1f} to {100 * tolerance.high:.1f} % at "
        f"{100 * tolerance.confidence:.0f} % confidence"
    )
    percent = 100 * tolerance.share
    return Check.at_least("yield", percent, None if limit is None else 100 * limit, "%", note)


def _offset(circuit: Circuit) -> float | None:
    """Largest offset of the output [V], None where it drifts instead."""
    if drifts(circuit):
        return None
    found = compile_circuit(circuit).dc_offsets()
    return float(found.worst[found.nets.index(circuit.output_net)])


def _noise(circuit: Circuit, frequency_hz: Real) -> NoiseResult:
    found = compile_circuit(circuit).noise(frequency_hz)
    power = float(np.trapezoid(found.total, frequency_hz))
    shares = np.asarray(np.trapezoid(found.power, frequency_hz, axis=0) / power)
    return NoiseResult(
        frequency_hz=frequency_hz,
        density=found.density,
        output_rms=float(np.sqrt(power)),
        shares=dict(zip(found.refs, shares.tolist(), strict=True)),
    )
