"""One form carried from H(s) to a circuit with ideal values, and the choice among forms."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.choosing.supply import check_supply
from synth.circuit import Circuit
from synth.errors import JobError, RealizationError
from synth.fixing import fixed_parts, unit_circuit
from synth.forms import FORMS, check_form_name, realize
from synth.graph import BlockGraph
from synth.job import Job
from synth.mapping import input_factor, map_graph
from synth.nodal import compile_circuit
from synth.peaks import SignalPeaks, signal_peaks
from synth.polarity import Polarity, choose_polarity
from synth.results import Candidate
from synth.scaling import Scaled, scale
from synth.tolerance import check_networks, predicted_spread

__all__ = ["Sketch", "choose_form", "sketch_form"]

Real = NDArray[np.float64]

# Fixed resistors behind a source resistance: scalings until its factor settles this closely.
FACTOR_ROUNDS = 5
FACTOR_SETTLED = 1e-4


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
        Predicted standard deviation of magnitude and phase from part tolerance, the largest
        over the band.
    """

    form: str
    graph: BlockGraph
    levels: dict[str, float]
    polarity: Polarity
    peaks: SignalPeaks
    circuit: Circuit
    spread_db: float
    spread_deg: float

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

    Raises
    ------
    RealizationError
        The form does not exist for this target or does not fit the parts.
    JobError
        The job fixes or matches a part this form does not have.
    """
    graph = realize(job.target, form)
    polarity = choose_polarity(graph, inverted=job.board.inverted)
    peaks = signal_peaks(graph, job.target, band_hz=job.signal.band_hz, swing=job.signal.swing)
    # Levels see the response at a part of the frequencies, the spread needs every peak of it.
    few = frequency_hz[:: max(1, frequency_hz.size // 200)]
    scaled, circuit = _scaled(graph, polarity, job, peaks, few)
    check_networks(circuit, job.board.population)
    tolerances = np.array([p.tolerance for p in circuit.passives])
    sensitivities = compile_circuit(circuit).sensitivities(frequency_hz)
    spread = predicted_spread(sensitivities, tolerances)
    return Sketch(
        form=form,
        graph=scaled.graph,
        levels=scaled.levels,
        polarity=polarity,
        peaks=peaks,
        circuit=circuit,
        spread_db=float(np.max(spread.magnitude_db)),
        spread_deg=float(np.max(spread.phase_deg)),
    )


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


def choose_form(
    job: Job, frequency_hz: Real, *, progress: Callable[[int, int], None] | None = None
) -> tuple[Sketch, tuple[Candidate, ...]]:
    """The form the job names, or the one with the smallest predicted spread, and every form
    considered, the best first and those that do not fit last.

    The spread compared is the larger of magnitude and phase, each over its limit.

    Raises
    ------
    JobError
        The job names a form that does not exist, or fixes a part that no form has.
    RealizationError
        The form the job names does not fit, or none does; the message has each reason.
    """
    check_form_name(job.board.form)
    names = list(FORMS) if job.board.form == "auto" else [job.board.form]
    sketches: list[Sketch] = []
    candidates: list[Candidate] = []
    unreadable: list[JobError] = []
    for k, name in enumerate(names):
        if progress is not None:
            progress(k, len(names))
        try:
            sketch = sketch_form(job, name, frequency_hz)
        except (JobError, RealizationError) as error:
            if len(names) == 1:
                raise
            if isinstance(error, JobError):
                unreadable.append(error)
            candidates.append(
                Candidate(
                    form=name,
                    possible=False,
                    op_amps=None,
                    spread_db=None,
                    spread_deg=None,
                    reason=str(error),
                )
            )
        else:
            sketches.append(sketch)
            candidates.append(sketch.candidate)
    if not sketches:
        forms: dict[str, list[str]] = {}
        for c in candidates:
            forms.setdefault(c.reason, []).append(c.form)
        reasons = "; ".join(f"{', '.join(names)}: {reason}" for reason, names in forms.items())
        if len(unreadable) == len(candidates):
            raise JobError(reasons, key="board.form")
        raise RealizationError(f"board.form: no form fits the parts: {reasons}")

    def spread(sketch: Sketch) -> tuple[float, int]:
        share = max(
            sketch.spread_db / job.accept.magnitude_db, sketch.spread_deg / job.accept.phase_deg
        )
        # Forms whose spreads agree to three digits are the same circuit; fewer op-amps win.
        return float(f"{share:.3g}"), len(sketch.circuit.amplifiers)

    ranked = sorted(sketches, key=spread)
    refused = [c for c in candidates if not c.possible]
    return ranked[0], (*(sketch.candidate for sketch in ranked), *refused)
