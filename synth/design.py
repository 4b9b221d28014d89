"""The one function that runs the stages, from a job to a design.

::

    Job -> target -> form -> block graph -> signs -> levels -> circuit -> standard values
        -> tolerance, worst case, noise, swing, drift -> Design

Everything here is computed; the simulator's opinion is asked for outside.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from synth.allowance import op_amp_allowance
from synth.candidates import Sketch, sketch_form
from synth.checks import board_checks, loop_of_board, yield_check
from synth.choosing import DEFAULT_EFFORT, Choice
from synth.choosing.supply import allotted
from synth.circuit import Circuit
from synth.errors import JobError
from synth.evidence import ResponseError, response_error
from synth.grid import judging_frequencies
from synth.job import Job, Loop
from synth.limits import drifts, swings
from synth.loop import LoopBoards, checked_loop
from synth.nodal import NodalProgram, compile_circuit
from synth.noise import output_noise
from synth.quantities import show
from synth.ranking import Mapper, rank_forms
from synth.results import Candidate, Design, ErrorBudget, LoopResult, Swing, ToleranceResult
from synth.tolerance import error_budget, run_boards, run_loops, value_ranges
from synth.values import ValueSearch, level_ratios, wanted_of
from synth.worstcase import worst_case

__all__ = ["DEFAULT_BOARDS", "DEFAULT_SEED", "compare_forms", "design", "judged_design"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Progress = Callable[[str, int, int], None]

# 50 times a stray of 2 pF.
SMALL_CAPACITOR = 100e-12

# Below this share of boards that keep the loop a notice says so.
LOW_SHARE = 0.9

DEFAULT_BOARDS = 10_000
DEFAULT_SEED = 1

# Below this share of the usual work the search hardly begins.
LEAST_EFFORT = 0.01


def compare_forms(
    job: Job,
    *,
    seed: int = DEFAULT_SEED,
    progress: Progress | None = None,
    mapper: Mapper | None = None,
) -> tuple[str, tuple[Candidate, ...]]:
    """The form `design` would take if the job named none, and every form, the best first.

    Parameters
    ----------
    seed, progress, mapper
        As of `design`.

    Raises
    ------
    JobError
        H(s) itself leaves the job's loop unstable.
    RealizationError
        No form fits.
    """
    if job.loop is not None:
        checked_loop(job.loop, job.target)
    say = progress or (lambda stage, done, total: None)
    frequency = judging_frequencies(job.target, job.signal.band_hz)
    ranking = rank_forms(
        job,
        frequency,
        seed=seed,
        progress=lambda done, total: say("forms", done, total),
        mapper=mapper,
    )
    return ranking.sketch.form, ranking.candidates


def design(
    job: Job,
    *,
    boards: int = DEFAULT_BOARDS,
    seed: int = DEFAULT_SEED,
    effort: float = 1,
    progress: Progress | None = None,
    mapper: Mapper | None = None,
) -> Design:
    """Carry a job through every stage.

    Parameters
    ----------
    boards
        How many boards the tolerance run draws, at least 1.
    seed
        Of the choice of values and of the boards; the same seed gives the same design.
    effort
        Multiple of the default work that the search for values is given; a small part of it gives
        values that are merely good.
    progress
        Called with the stage's name, and how much of how much of it is done.
    mapper
        Like ``map``, for the forms to be compared in several processes; see
        `synth.ranking.rank_forms`.

    Raises
    ------
    JobError, RealizationError
        The job contradicts itself, or no circuit within its rules exists.
    """
    if not effort >= LEAST_EFFORT:
        raise JobError(f"got the effort {effort}, expected {LEAST_EFFORT} or more", key="effort")
    if job.loop is not None:
        checked_loop(job.loop, job.target)
    say = progress or (lambda stage, done, total: None)
    frequency = judging_frequencies(job.target, job.signal.band_hz)
    if job.board.form == "auto":
        ranking = rank_forms(
            job,
            frequency,
            seed=seed,
            progress=lambda done, total: say("forms", done, total),
            mapper=mapper,
        )
        sketch, candidates = ranking.sketch, ranking.candidates
    else:
        sketch = sketch_form(job, job.board.form, frequency)
        candidates = (sketch.candidate,)
    response = wanted_of(sketch, job).response(frequency)
    search = ValueSearch(sketch, job, response, frequency, seed, int(effort * DEFAULT_EFFORT))
    choice, unaware = search.both(say)
    made = judged_design(
        job, sketch, candidates, choice, frequency, boards=boards, seed=seed, progress=say
    )
    return replace(
        made,
        allowance=op_amp_allowance(made.circuit, unaware.circuit, response, frequency),
        effort=effort,
    )


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
    wanted = wanted_of(sketch, job)
    response = wanted.response(frequency)
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
        population=job.board.population,
        wanted=job.target,
        progress=lambda done, total: progress("boards", done, total),
    )
    progress("worst case", 0, 1)
    ranges = value_ranges(circuit, job.board.population)
    worst = worst_case(circuit, response, frequency, target=wanted, ranges=ranges)
    progress("limits", 0, 1)
    swing = swings(circuit, wanted, job)
    loop = _loop(job, program, sketch, boards=boards, seed=seed, progress=progress)
    nominal = response_error(program.solve(frequency), response)
    return Design(
        job=job,
        form=sketch.form,
        inverted=sketch.polarity.output_inverted,
        wanted=wanted,
        graph=sketch.graph.rescaled(level_ratios(sketch, circuit, frequency)),
        circuit=circuit,
        frequency_hz=frequency,
        nominal=nominal,
        nearest=response_error(compile_circuit(choice.nearest).solve(frequency), response),
        tolerance=tolerance,
        noise=output_noise(circuit, frequency),
        swings=swing,
        drifts=drifts(circuit),
        candidates=candidates,
        checks=(yield_check(tolerance, job), *board_checks(job, circuit, swing, loop)),
        offset=_offset(circuit),
        certificate=choice.certificate,
        budget=_budget(job, program, nominal, frequency, seed),
        worst=worst,
        loop=loop,
        notices=(
            *(*job.notices, *sketch.notices, *choice.notices),
            *(*_notices(circuit, job, swing, loop), *_oscillation(tolerance)),
        ),
    )


def _loop(
    job: Job,
    program: NodalProgram,
    sketch: Sketch,
    *,
    boards: int,
    seed: int,
    progress: Progress,
) -> LoopResult | None:
    """Margins of the job's loop, those over the run of boards among them."""
    circuit, inverted = program.circuit, sketch.polarity.output_inverted
    found = loop_of_board(job, circuit, inverted=inverted)
    if job.loop is None or found is None:
        return None
    run = run_loops(
        program,
        circuit,
        job.loop,
        job.target,
        inverted=inverted,
        boards=boards,
        seed=seed,
        population=job.board.population,
        progress=lambda done, total: progress("loops", done, total),
    )
    return replace(found, boards=run)


def _budget(
    job: Job, program: NodalProgram, nominal: ResponseError, frequency: Real, seed: int
) -> ErrorBudget:
    """What values and the population of the job take of the error."""
    return error_budget(
        program,
        program.circuit,
        nominal,
        frequency,
        accept=job.accept,
        seed=seed,
        population=job.board.population,
    )


def _notices(
    circuit: Circuit, job: Job, swing: tuple[Swing, ...], loop: LoopResult | None
) -> tuple[str, ...]:
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
    run = loop.boards if loop else None
    if run is not None and run.share < LOW_SHARE:
        said.append(_lost_loops(run, job.loop))
    return tuple(said)


def _lost_loops(run: LoopBoards, loop: Loop | None) -> str:
    """Why boards do not keep the loop: those that are unstable, and of the stable ones how many
    miss which margin."""
    unstable = run.boards - run.stable
    reasons = [f"{unstable or 'none'} {'is' if unstable < 2 else 'are'} unstable"]
    limits = (loop.phase_margin_deg, loop.gain_margin_db) if loop else (None, None)
    for short, limit, unit, name in zip(
        (run.short_of_phase, run.short_of_gain), limits, ("deg", "dB"), ("phase", "gain"),
        strict=True,
    ):  # fmt: skip
        if short and limit is not None:
            verb = "is stable but misses" if short == 1 else "are stable but miss"
            reasons.append(f"{short} {verb} the {name} margin of {show(limit, unit)}")
    return (
        f"only {run.passed} of {run.boards} boards keep the loop stable and within its margins: "
        f"{', '.join(reasons)}"
    )


def _oscillation(run: ToleranceResult) -> tuple[str, ...]:
    """A notice of boards that oscillate by themselves, which the nominal board need not do."""
    if not run.unstable:
        return ()
    return (
        f"{run.unstable} of {run.boards} boards are unstable by themselves: they oscillate "
        "whatever their response over the band; faster op-amps or another form may help",
    )


def _offset(circuit: Circuit) -> float | None:
    """Largest offset of the output [V], None where it drifts instead."""
    if drifts(circuit):
        return None
    found = compile_circuit(circuit).dc_offsets()
    return float(found.worst[found.nets.index(circuit.output_net)])
