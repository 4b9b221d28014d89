"""The one function that runs the stages, from a job to a design.

::

    Job -> target -> form -> block graph -> signs -> levels -> circuit -> standard values
        -> tolerance, noise, swing, drift -> Design

Everything here is computed; the simulator's opinion is asked for outside.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from synth.candidates import Sketch, choose_form
from synth.choosing import Choice, choose_values
from synth.choosing.choose import DEFAULT_EFFORT
from synth.circuit import Circuit
from synth.evidence import Check, response_error
from synth.graph import BlockGraph
from synth.grid import judging_frequencies
from synth.job import Job
from synth.limits import drifts, swing_checks, swings
from synth.loop import loop_checks, loop_margins
from synth.nodal import compile_circuit
from synth.peaks import frequencies_of_interest
from synth.results import Candidate, Design, LoopResult, NoiseResult, Swing, ToleranceResult
from synth.tolerance import run_boards
from synth.transfer import TransferFunction

__all__ = [
    "DEFAULT_BOARDS",
    "DEFAULT_SEED",
    "compare_forms",
    "design",
    "judged_design",
    "level_ratios",
    "standard_values",
    "thinned",
    "wanted_of",
]

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
    progress: Progress | None = None,
) -> Design:
    """Carry a job through every stage.

    Parameters
    ----------
    boards
        How many boards the tolerance run draws, at least 1.
    seed
        Of the choice of values and of the boards; the same seed gives the same design.
    progress
        Called with the stage's name, and how much of how much of it is done.

    Raises
    ------
    JobError, RealizationError
        The job contradicts itself, or no circuit within its rules exists.
    """
    say = progress or (lambda stage, done, total: None)
    frequency = judging_frequencies(job.target, job.signal.band_hz)
    sketch, candidates = choose_form(
        job, frequency, progress=lambda done, total: say("forms", done, total)
    )
    say("values", 0, 1)
    choice = standard_values(
        sketch, job, wanted_of(sketch, job).response(frequency), frequency, seed
    )
    return judged_design(
        job, sketch, candidates, choice, frequency, boards=boards, seed=seed, progress=say
    )


def wanted_of(sketch: Sketch, job: Job) -> TransferFunction:
    """What the output net must show: H(s) or -H(s)."""
    return job.target.negated() if sketch.polarity.output_inverted else job.target


def judged_design(
    job: Job,
    sketch: Sketch,
    candidates: tuple[Candidate, ...],
    choice: Choice,
    frequency: Real,
    *,
    boards: int,
    seed: int,
    progress: Progress,
) -> Design:
    """The design with the chosen values and all that is predicted of it; arguments as those of
    `design`, errors on the grid `frequency` (F,) [Hz]."""
    say = progress
    wanted = wanted_of(sketch, job)
    response = wanted.response(frequency)
    circuit = choice.circuit
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
    return Design(
        job=job,
        form=sketch.form,
        inverted=sketch.polarity.output_inverted,
        wanted=wanted,
        graph=_as_chosen(sketch, circuit, frequency),
        circuit=circuit,
        frequency_hz=frequency,
        nominal=response_error(program.solve(frequency), response),
        nearest=response_error(compile_circuit(choice.nearest).solve(frequency), response),
        tolerance=tolerance,
        noise=_noise(circuit, frequency),
        swings=swing,
        drifts=drifts(circuit),
        candidates=candidates,
        checks=_checks(job, circuit, tolerance, swing, loop),
        loop=loop,
        notices=(*job.notices, *_notices(circuit, job, swing)),
    )


def thinned(frequency_hz: Real) -> slice:
    """About `FREQUENCIES_OF_THE_SEARCH` of the frequencies."""
    return slice(None, None, max(1, frequency_hz.size // FREQUENCIES_OF_THE_SEARCH))


def standard_values(
    sketch: Sketch,
    job: Job,
    response: Complex,
    frequency_hz: Real,
    seed: int,
    *,
    effort: int = DEFAULT_EFFORT,
) -> Choice:
    """Standard values for the sketch's circuit, for the `response` (F,) of its output."""
    few = thinned(frequency_hz)
    return choose_values(
        sketch.circuit,
        target=response[few],
        frequency_hz=frequency_hz[few],
        accept=job.accept,
        level_limits=_level_limits(sketch, job),
        seed=seed,
        effort=effort,
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
    return sketch.graph.rescaled(level_ratios(sketch, circuit, frequency_hz))


def level_ratios(sketch: Sketch, circuit: Circuit, frequency_hz: Real) -> dict[str, float]:
    """By block other than the output's: its level in `circuit` over that in the sketch's graph,
    the mean over the frequencies."""
    signals = sketch.graph.signals(2j * np.pi * frequency_hz)
    cells = [c for c in circuit.cells if c.kind != "inverter"]
    volts = np.abs(compile_circuit(circuit).solve(frequency_hz, nets=[c.output for c in cells]))
    return {
        cell.block: float(np.exp(np.mean(np.log(volts[:, k] / np.abs(signals[cell.block])))))
        for k, cell in enumerate(cells)
        if cell.block != sketch.graph.output
    }


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


def _level_limits(sketch: Sketch, job: Job) -> dict[str, tuple[float, float]]:
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
            inverter = [sketch.circuit.by_ref[r].ideal for r in (*cell.inputs, cell.feedback)]
            highest = job.signal.input_peak * inverter[1] / inverter[0]
            limits[cell.output] = (job.signal.band_hz[0], job.board.swing_limit / highest)
            continue
        volts = job.signal.input_peak * sketch.levels[cell.block]
        rising = min(
            job.board.swing_limit / (volts * peaks.peak[cell.block]),
            job.board.op_amp.slew_rate / 2 / (volts * peaks.rate[cell.block]),
        )
        # An adder may be flat up to where op-amps end: its peak is where the flat part begins.
        size = np.abs(signals[cell.block])
        watch = float(grid[int(np.argmax(size >= (1 - FLAT) * np.max(size)))])
        limits[cell.output] = (watch, rising)
    return limits


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
