"""One form carried from H(s) to a circuit with ideal values."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.supply import check_supply
from synth.circuit import Circuit
from synth.errors import JobError, RealizationError
from synth.fixing import fixed_parts, unit_circuit
from synth.forms import realize
from synth.graph import BlockGraph
from synth.job import Job
from synth.mapping import input_factor, map_graph
from synth.merging import merge_adders
from synth.nodal import compile_circuit
from synth.peaks import SignalPeaks, frequencies_of_interest, signal_peaks
from synth.polarity import Polarity, choose_polarity
from synth.results import Candidate
from synth.scaling import Scaled, scale
from synth.splitting import added_stages, split_graphs
from synth.tolerance import check_networks, predicted_spread

__all__ = ["Sketch", "refused", "sketch_form"]

Real = NDArray[np.float64]

# Fixed resistors behind a source resistance: scalings until its factor settles this closely.
FACTOR_ROUNDS = 5
FACTOR_SETTLED = 1e-4

# The cost of folding an adder is looked at at every fourth frequency that sees all peaks.
FOLDS_LOOK_AT_EVERY = 4


@dataclass(frozen=True, kw_only=True)
class Sketch:
    """A form as a circuit with ideal values, and what is known of it.

    Parameters
    ----------
    graph
        Scaled to volts.
    levels
        Volts per unit of each block's signal before scaling.
    polarity, peaks, circuit
        Its signs, the peaks of its signals before scaling, and its circuit.
    spread_db, spread_deg
        Predicted standard deviation of magnitude and phase over the boards of the job, the
        largest over the band.
    notices
        What the user should know of how the form became a circuit.
    """

    form: str
    graph: BlockGraph
    levels: dict[str, float]
    polarity: Polarity
    peaks: SignalPeaks
    circuit: Circuit
    spread_db: float
    spread_deg: float
    notices: tuple[str, ...] = ()

    @property
    def candidate(self) -> Candidate:
        """Its line in the table of forms."""
        return Candidate(
            form=self.form,
            possible=True,
            op_amps=len(self.circuit.amplifiers),
            spread_db=self.spread_db,
            spread_deg=self.spread_deg,
        )


def sketch_form(job: Job, form: str, frequency_hz: Real) -> Sketch:
    """Realise, sign, scale and map the job's target in one form.

    Adders are folded where that saves op-amps and the result fits; where even the form as it is
    does not fit the parts, gains are split over more stages.

    Raises
    ------
    RealizationError
        The form does not exist for this target or does not fit the parts.
    JobError
        The job fixes or matches a part this form does not have.
    """
    # Levels see the response at a part of the frequencies, the spread needs every peak of it.
    few = frequency_hz[:: max(1, frequency_hz.size // 200)]
    fitted = _fitted(realize(job.target, form), job, few)
    circuit = fitted.circuit
    check_networks(circuit, job.board.population)
    sensitivities = compile_circuit(circuit).sensitivities(frequency_hz)
    spread = predicted_spread(sensitivities, circuit, job.board.population)
    return Sketch(
        form=form,
        graph=fitted.scaled.graph,
        levels=fitted.scaled.levels,
        polarity=fitted.polarity,
        peaks=fitted.peaks,
        circuit=circuit,
        spread_db=float(np.max(spread.magnitude_db)),
        spread_deg=float(np.max(spread.phase_deg)),
        notices=fitted.notices,
    )


@dataclass(frozen=True, kw_only=True)
class _Fitted:
    """A graph with signs, levels and impedances within the job's rules, and its circuit."""

    polarity: Polarity
    peaks: SignalPeaks
    scaled: Scaled
    circuit: Circuit
    notices: tuple[str, ...] = ()


def _fitted(graph: BlockGraph, job: Job, frequency_hz: Real) -> _Fitted:
    """The first that fits: adders folded, the graph as it is, gains split over more stages.

    Which of them does not depend on what the job fixes: references are those of the circuit
    one gets, and sees, with nothing fixed.
    """
    free = replace(job, board=replace(job.board, fixed=()))
    refusals: dict[BlockGraph, RealizationError] = {}
    for trial in _variants(graph, job):
        try:
            fitted = _fit(trial, free, frequency_hz)
        except RealizationError as refusal:
            refusals[trial] = refusal
            continue
        if job.board.fixed:
            fitted = _fit(trial, job, frequency_hz)
        return replace(fitted, notices=_notices(trial, graph, refusals.get(graph)))
    if job.board.fixed:
        return _fit(graph, job, frequency_hz)
    raise refusals[graph]


def _variants(graph: BlockGraph, job: Job) -> Iterator[BlockGraph]:
    """Graphs equal to `graph`, in the order in which they are tried."""
    looked_at = frequencies_of_interest(job.target)[::FOLDS_LOOK_AT_EVERY]
    merged = merge_adders(graph, looked_at, inverted=job.board.inverted)
    yield merged
    if merged is not graph:
        yield graph
    yield from split_graphs(graph, job, _peaks(graph, job))


def _notices(
    fitted: BlockGraph, graph: BlockGraph, refusal: RealizationError | None
) -> tuple[str, ...]:
    """What is said of stages that were added."""
    stages = added_stages(fitted, graph)
    if not stages:
        return ()
    names = ", ".join(b.name for b in stages)
    return (f"{names}: stages added to split gains; without them, {refusal}",)


def _peaks(graph: BlockGraph, job: Job) -> SignalPeaks:
    return signal_peaks(graph, job.target, band_hz=job.signal.band_hz, swing=job.signal.swing)


def _fit(graph: BlockGraph, job: Job, frequency_hz: Real) -> _Fitted:
    """Signs, levels, impedances and the circuit of one graph."""
    polarity = choose_polarity(graph, inverted=job.board.inverted)
    peaks = _peaks(graph, job)
    scaled, circuit = _scaled(graph, polarity, job, peaks, frequency_hz)
    return _Fitted(polarity=polarity, peaks=peaks, scaled=scaled, circuit=circuit)


def _scaled(
    graph: BlockGraph, polarity: Polarity, job: Job, peaks: SignalPeaks, frequency_hz: Real
) -> tuple[Scaled, Circuit]:
    """Levels and impedances with the values the job fixes, and the circuit with ideal values."""
    units = unit_circuit(graph, polarity, job)
    factor = 1.0
    held = fixed_parts(units, job)
    check_supply(held.marked(units).passives)
    for _ in range(FACTOR_ROUNDS):
        scaled = scale(graph, polarity, job, peaks, frequency_hz, held=held)
        before = factor
        factor = input_factor(scaled.graph, polarity, scaled.sizing, job)
        if not held.behind_source or abs(factor / before - 1) < FACTOR_SETTLED:
            break
        held = fixed_parts(units, job, factor=factor)
    return scaled, held.marked(map_graph(scaled.graph, polarity, scaled.sizing, job))


def refused(found: Sequence[tuple[Candidate, JobError | None]]) -> JobError | RealizationError:
    """The error for a job that no form fits: every reason, with the forms it holds for; of the
    job, where a form finds it unreadable."""
    forms: dict[str, list[str]] = {}
    for candidate, _ in found:
        forms.setdefault(candidate.reason, []).append(candidate.form)
    reasons = "; ".join(f"{', '.join(names)}: {reason}" for reason, names in forms.items())
    if any(error is not None for _, error in found):
        return JobError(reasons, key="board.form")
    return RealizationError(f"board.form: no form fits the parts: {reasons}")
