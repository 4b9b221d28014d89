"""Every form carried through to standard values and boards, and the choice among them.

Each form gets values, a run of boards, noise, swing and the op-amp it needs, all by the same
limits, seed and effort.  Among the forms whose nominal board keeps every limit, whose yield keeps
the job's limit on it, and whose yield is not clearly below the best one's (their intervals
overlap) the one with the fewest op-amps is taken, then the one with the smallest 95th percentile
of the error; each other one is told why it was not.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from synth.bandwidth import gain_bandwidth_needed
from synth.candidates import Sketch, refused, sketch_form
from synth.checks import board_checks, loop_of_board
from synth.choosing import DEFAULT_EFFORT
from synth.choosing.supply import allotted
from synth.circuit import Circuit
from synth.errors import JobError, NumericalError, RealizationError
from synth.evidence import Check, response_error
from synth.forms import FORMS, realize
from synth.job import Job
from synth.limits import swings
from synth.nodal import compile_circuit
from synth.noise import dynamic_range_db, output_noise
from synth.quantities import show_share
from synth.results import Candidate, ErrorFigures, FormFigures
from synth.tolerance import run_boards
from synth.values import standard_values, wanted_of

__all__ = ["RANKED_BOARDS", "Assessed", "Mapper", "Ranking", "chosen_among", "rank_forms"]

Real = NDArray[np.float64]
Assess = Callable[[str], "Assessed"]
Mapper = Callable[[Assess, Iterable[str]], Iterator["Assessed"]]

# Boards that each form is judged by.
RANKED_BOARDS = 1000

# Share of the usual work that the search for values gets: a form is not told from another by
# the last digit of its nominal error, which tolerance drowns.
EFFORT_SHARE = 0.05


@dataclass(frozen=True, kw_only=True)
class Assessed:
    """One form: its line, its circuit where it has one, and whether the job contradicts it."""

    candidate: Candidate
    sketch: Sketch | None = None
    unreadable: JobError | None = None


@dataclass(frozen=True, kw_only=True)
class Ranking:
    """The form taken and every form considered, the best first, those that do not fit last."""

    sketch: Sketch
    candidates: tuple[Candidate, ...]


def rank_forms(
    job: Job,
    frequency_hz: Real,
    *,
    seed: int,
    progress: Callable[[int, int], None] | None = None,
    mapper: Mapper | None = None,
) -> Ranking:
    """Assess every form and choose one.

    Parameters
    ----------
    frequency_hz
        Where the response is judged, shape (F,) [Hz].
    seed
        Of the choice of values and of the boards.
    progress
        Called with (forms done, forms).
    mapper
        Like ``map``, in the order of its argument; one that works in several processes saves
        time.  What it is given can be pickled.

    Raises
    ------
    JobError
        The job fixes a part that no form has.
    RealizationError
        No form fits; the message has each reason.
    """
    say = progress or (lambda done, total: None)
    alike = _alike(job)
    say(0, len(FORMS))
    found: list[Assessed] = []
    work = partial(_assess, job, frequency_hz=frequency_hz, seed=seed)
    for names, one in zip(alike, (mapper or map)(work, [n[0] for n in alike]), strict=True):
        found += [one, *(_named(one, name) for name in names[1:])]
        say(len(found), len(FORMS))
    found.sort(key=lambda one: list(FORMS).index(one.candidate.form))
    possible = [one for one in found if one.sketch is not None]
    if not possible:
        raise refused([(one.candidate, one.unreadable) for one in found])
    ordered = chosen_among([one.candidate for one in possible], least=job.accept.yield_share)
    first = {name: names[0] for names in alike for name in names[1:]}
    ordered = [
        replace(c, reason=f"the same circuit as {first[c.form]}") if c.form in first else c
        for c in ordered
    ]
    others = [one.candidate for one in found if one.sketch is None]
    (sketch,) = (o.sketch for o in possible if o.candidate.form == ordered[0].form)
    assert sketch is not None
    return Ranking(sketch=sketch, candidates=(*ordered, *others))


def _alike(job: Job) -> list[list[str]]:
    """All forms, those together that give the same graph: sections of one real pole are the same
    whatever their kind."""
    found: dict[object, list[str]] = {}
    for form in FORMS:
        try:
            graph = realize(job.target, form)
        except (RealizationError, NumericalError):
            found[form] = [form]
            continue
        blocks = tuple(
            (b.name, b.kind, b.both_signs, tuple((t.source, t.weight) for t in b.terms))
            for b in graph.blocks
        )
        found.setdefault((blocks, graph.output), []).append(form)
    return list(found.values())


def _named(one: Assessed, form: str) -> Assessed:
    """What was found of one form, for another that has the same graph."""
    sketch = None if one.sketch is None else replace(one.sketch, form=form)
    return replace(one, candidate=replace(one.candidate, form=form), sketch=sketch)


def _assess(job: Job, form: str, *, frequency_hz: Real, seed: int) -> Assessed:
    """One form with standard values, judged by the limits of the job."""
    try:
        sketch = sketch_form(job, form, frequency_hz)
        response = wanted_of(sketch, job).response(frequency_hz)
        effort = int(EFFORT_SHARE * DEFAULT_EFFORT)
        choice = standard_values(sketch, job, response, frequency_hz, seed, effort=effort)
    except (JobError, RealizationError, NumericalError) as error:
        return Assessed(
            candidate=Candidate(
                form=form,
                possible=False,
                op_amps=None,
                spread_db=None,
                spread_deg=None,
                reason=str(error).removeprefix("board.form: "),
            ),
            unreadable=error if isinstance(error, JobError) else None,
        )
    figures = _figures(job, sketch, allotted(choice.circuit), frequency_hz, seed)
    failed = figures.missed or _is_short(figures, job.accept.yield_share)
    candidate = replace(sketch.candidate, figures=figures, verdict="fail" if failed else "pass")
    return Assessed(candidate=candidate, sketch=sketch)


def _figures(
    job: Job, sketch: Sketch, circuit: Circuit, frequency_hz: Real, seed: int
) -> FormFigures:
    wanted = wanted_of(sketch, job)
    response = wanted.response(frequency_hz)
    program = compile_circuit(circuit)
    run = run_boards(
        program,
        circuit,
        response,
        frequency_hz,
        accept=job.accept,
        boards=RANKED_BOARDS,
        seed=seed,
        population=job.board.population,
        wanted=job.target,
    )
    swing = swings(circuit, wanted, job)
    nominal = ErrorFigures.of(response_error(program.solve(frequency_hz), response))
    noise = output_noise(circuit, frequency_hz)
    hottest = max(swing, key=lambda s: s.peak)
    kinds = [p.kind for p in circuit.bought]
    loop = loop_of_board(job, circuit, inverted=sketch.polarity.output_inverted)
    checks = (
        Check.at_most("magnitude error", nominal.largest_db, job.accept.magnitude_db, "dB"),
        Check.at_most("phase error", nominal.largest_deg, job.accept.phase_deg, "deg"),
        *board_checks(job, circuit, swing, loop),
    )
    return FormFigures(
        resistors=kinds.count("resistor"),
        capacitors=kinds.count("capacitor"),
        value_ratio=_value_ratio(circuit),
        nominal=nominal,
        boards=run.boards,
        passed=run.passed,
        low=run.low,
        high=run.high,
        error_95_db=run.error_95_db,
        noise_rms=noise.output_rms,
        dynamic_range_db=dynamic_range_db(swing, circuit.output_net, noise.output_rms),
        peak=hottest.peak,
        hottest=hottest.amplifier,
        gain_bandwidth_needed=gain_bandwidth_needed(
            circuit, response, frequency_hz, accept=job.accept, wanted=job.target
        ),
        missed=tuple(_missed(c) for c in checks if not c.passed),
    )


def _value_ratio(circuit: Circuit) -> float:
    """Largest over smallest value of a kind, the larger of both kinds."""
    ratios = [1.0]
    for kind in ("resistor", "capacitor"):
        values = [p.value for p in circuit.bought if p.kind == kind]
        ratios.append(max(values) / min(values) if values else 1.0)
    return max(ratios)


def _missed(check: Check) -> str:
    """A failed check in words."""
    value = "none" if check.value is None else f"{check.value:.3g} {check.unit}"
    return f"{check.name} {value}, limit {check.limit:.3g} {check.unit}"


def chosen_among(candidates: Iterable[Candidate], *, least: float | None = None) -> list[Candidate]:
    """Forms with figures in their order: the one to take, then the others by the same rule,
    each with the reason why it comes after; ties go to the earlier one.

    `least` is the smallest share of boards the job accepts, a ratio; None for no limit.
    """
    waiting = list(candidates)
    sound = [c for c in waiting if not _of(c).missed]
    kept = [c for c in sound if not _is_short(_of(c), least)]
    best = max(kept or sound or waiting, key=lambda c: (_of(c).share, -_of(c).error_95_db))
    ordered = sorted(waiting, key=partial(_key, floor=_of(best).low, least=least))
    first = ordered[0]
    rest = (replace(c, reason=_reason(c, first, best, least)) for c in ordered[1:])
    return [first, *rest]


def _is_short(figures: FormFigures, least: float | None) -> bool:
    """Whether the yield misses the job's limit, by the share of the boards, as in the verdict."""
    return least is not None and figures.share < least


def _of(candidate: Candidate) -> FormFigures:
    assert candidate.figures is not None
    return candidate.figures


def _key(candidate: Candidate, *, floor: float, least: float | None) -> tuple[object, ...]:
    """Sound before unsound, those that keep the limit on the yield before those that miss it,
    among the best yields before below them, then fewest op-amps, then the smallest error; below
    the best yields by yield."""
    figures = _of(candidate)
    below = figures.high < floor
    return (
        bool(figures.missed),
        _is_short(figures, least),
        below,
        -figures.share if below else 0.0,
        candidate.op_amps,
        _shown(figures.error_95_db),
    )


def _shown(error_db: float) -> float:
    """An error as it is shown: what looks the same counts the same."""
    return float(f"{error_db:.3g}")


def _reason(candidate: Candidate, first: Candidate, best: Candidate, least: float | None) -> str:
    """Why `candidate` comes after `first`."""
    figures, taken = _of(candidate), _of(first)
    if figures.missed and not taken.missed:
        more = f" and {len(figures.missed) - 1} more" if len(figures.missed) > 1 else ""
        return f"misses a limit with nominal parts: {figures.missed[0]}{more}"
    if least is not None and _is_short(figures, least) and not _is_short(taken, least):
        return (
            f"yield {100 * figures.share:.1f} % misses the limit of {100 * least:.4g} %, which "
            f"{first.form} keeps"
        )
    if figures.high < _of(best).low:
        return (
            f"yield {show_share(figures.share)}, at most {show_share(figures.high)}, is below the "
            f"{show_share(_of(best).share)} of {best.form}, at least {show_share(_of(best).low)}"
        )
    if candidate.op_amps != first.op_amps:
        return f"{candidate.op_amps} op-amps, {first.form} does it with {first.op_amps}"
    if _shown(figures.error_95_db) != _shown(taken.error_95_db):
        return (
            f"as many op-amps, but a 95th percentile of the error of {figures.error_95_db:.3g} dB "
            f"against {taken.error_95_db:.3g} dB"
        )
    return f"as good as {first.form}, which comes first"
