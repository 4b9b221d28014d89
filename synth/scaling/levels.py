"""The search for the levels: two smooth minimisations over a region of linear limits."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.fixing import FixedParts
from synth.graph import INPUT, BlockGraph
from synth.job import Job
from synth.mapping import Sizing
from synth.peaks import SignalPeaks
from synth.polarity import Polarity
from synth.preferred import nearest
from synth.scaling.constraints import Region, least_on_source, refuse, region
from synth.scaling.crowding import crowded_blocks, rooms_at_both_inputs
from synth.scaling.objectives import current_shares, noise_power, response_error_power
from synth.scaling.signomial import Signomial
from synth.scaling.standard import room_for, with_standard_capacitors
from synth.scaling.variables import Variables

__all__ = ["Scaled", "scale"]

Real = NDArray[np.float64]
Smooth = Callable[[Real], tuple[float, Real]]

NOTHING_FIXED = FixedParts()

# Comfortable sizes (common practice), the weight of leaving them per decade squared.
COMFORTABLE_R = 14e3
COMFORTABLE_C = 4.7e-9
COMFORT_WEIGHT = 0.3

# What the second minimisation may give up of the first: a ratio of its optimum, or this
# share of the accepted magnitude error, whichever is larger.
ERROR_RATIO = 1.1
ERROR_SHARE = 0.02

# A mean square error as good as none.
NO_ERROR = 1e-40

# Largest share of the output current the parts around an output may take.
CURRENT_SHARE = 0.7


@dataclass(frozen=True, kw_only=True)
class Scaled:
    """A graph in volts, the impedance of its cells, and the predicted error.

    `levels` are the volts per unit of each block's signal before.  `predicted_error` is the
    root mean square of the error of ln H over the band from the op-amps alone, first order,
    with ideal values.
    """

    graph: BlockGraph
    levels: dict[str, float]
    sizing: Sizing
    predicted_error: float


def scale(
    graph: BlockGraph,
    polarity: Polarity,
    job: Job,
    peaks: SignalPeaks,
    frequency_hz: Real,
    *,
    held: FixedParts = NOTHING_FIXED,
) -> Scaled:
    """Levels, capacitors and feedback resistors for `graph`.

    Parameters
    ----------
    frequency_hz
        Where the response error and the noise are judged, ascending, shape (F,) [Hz].
    held
        The values the job fixes.

    Raises
    ------
    RealizationError
        No choice fits the ranges of the parts, or the fixed values; the message has the
        numbers.
    """
    variables = Variables(graph)
    limits = region(variables, job, peaks, held)
    start, margin = limits.without_fixed().start()
    if margin < -1e-9:
        raise refuse(variables, job, start)
    eased, start = room_for(variables, limits, start, held)
    problem = _Problem(
        variables,
        error=response_error_power(variables, polarity, job.board.op_amp, frequency_hz),
        noise=noise_power(variables, polarity, job.board.op_amp, frequency_hz),
        currents=current_shares(
            variables,
            peaks,
            job.board.op_amp,
            input_peak=job.signal.input_peak,
            load=job.signal.load,
        ),
        allowed_error=ERROR_SHARE * job.accept.magnitude_db / 8.686,
        rooms=rooms_at_both_inputs(variables, polarity, job.board.resistors.ends[0]),
    )
    v = problem.solve(eased, start)
    limits, v = with_standard_capacitors(variables, job, limits, v, held)
    v = problem.solve(limits, v)
    sizes = variables.sizes_of(v)
    capacitors = {
        b.name: nearest(job.board.capacitors.values, sizes[b.name])
        for b in graph.blocks
        if b.is_integrator
    }
    capacitors |= {name: held.sizes[name] for name in capacitors if name in held.sizes}
    feedback = {b.name: sizes[b.name] for b in graph.adders}
    return Scaled(
        graph=graph.rescaled(variables.levels_of(v)),
        levels={graph.output: 1.0, **variables.levels_of(v)},
        sizing=Sizing(
            capacitors=capacitors,
            feedback=feedback,
            inverters=_inverter_value(job),
            own_inverters={INPUT: _input_inverter(graph, job), **held.inverters},
            factors=held.factors,
        ),
        predicted_error=_predicted_error(variables, polarity, job, frequency_hz, v),
    )


def _predicted_error(
    variables: Variables, polarity: Polarity, job: Job, frequency_hz: Real, v: Real
) -> float:
    """Root mean square of the error of ln H, whatever cells are crowded."""
    crowded = crowded_blocks(variables, polarity, v)
    error = response_error_power(
        variables, polarity, job.board.op_amp, frequency_hz, crowded=crowded
    )
    return math.sqrt(max(error(v)[0], 0.0))


def _input_inverter(graph: BlockGraph, job: Job) -> tuple[float, float]:
    """The same for the inverter of the input, which must not load the source."""
    least = least_on_source(graph, job) if job.signal.source_resistance else 0.0
    value = nearest(job.board.resistors.values, max(10e3, least))
    return value, value


def _inverter_value(job: Job) -> float:
    """The standard value next to 10 kohm (common practice)."""
    return nearest(job.board.resistors.values, 10e3)


@dataclass(frozen=True, eq=False)
class _Problem:
    """The two objectives and how they are combined."""

    variables: Variables
    error: Signomial
    noise: Signomial
    currents: list[Signomial]
    allowed_error: float
    rooms: tuple[Smooth, ...] = ()

    def solve(self, limits: Region, start: Real) -> Real:
        """Least error, then least noise within what may be given up of it."""
        first = _minimise(self._of_error, limits, start, self.rooms)
        least, _ = self.error(first)
        allowed = max(ERROR_RATIO**2 * least, self.allowed_error**2)

        def room(v: Real) -> tuple[float, Real]:
            value, gradient = self.error(v)
            value = min(max(value, NO_ERROR), 1e300)
            return math.log(allowed) - math.log(value), -gradient / value

        second = _minimise(self._of_noise, limits, first, (*self.rooms, room))
        within = room(second)[0] > -1e-6 and float(np.max(limits.excess(second))) < 1e-6
        return second if within else first

    def _of_error(self, v: Real) -> tuple[float, Real]:
        value, gradient = self.error(v)
        value = max(value, NO_ERROR)
        comfort, slope = self._comfort(v)
        return math.log(value) + 0.01 * comfort, gradient / value + 0.01 * slope

    def _of_noise(self, v: Real) -> tuple[float, Real]:
        value, gradient = self.noise(v)
        comfort, slope = self._comfort(v)
        return math.log(value) + comfort, gradient / value + slope

    def _comfort(self, v: Real) -> tuple[float, Real]:
        """Penalty on resistors and capacitors far from comfortable sizes, and on currents."""
        rows, centres = self._comfort_rows
        distance = (rows @ v - centres) / math.log(10)
        total = COMFORT_WEIGHT * float(distance @ distance)
        slope = COMFORT_WEIGHT * 2 * (distance @ rows) / math.log(10)
        for share in self.currents:
            value, gradient = share(v)
            over = math.log(max(value, 1e-300) / CURRENT_SHARE)
            if over > 0:
                total += 20 * over**2
                slope = slope + 40 * over * gradient / value
        return total, slope

    @cached_property
    def _comfort_rows(self) -> tuple[Real, Real]:
        rows: list[Real] = []
        centres: list[float] = []
        for block in self.variables.graph.blocks:
            rows.append(self.variables.size(block.name))
            centres.append(math.log(COMFORTABLE_C if block.is_integrator else COMFORTABLE_R))
            for term in block.terms:
                r, exponents = self.variables.resistance(block, term)
                rows.append(exponents)
                centres.append(math.log(COMFORTABLE_R / r))
        return np.array(rows), np.array(centres)


def _minimise(
    objective: Smooth, limits: Region, start: Real, rooms: tuple[Smooth, ...] = ()
) -> Real:
    """A local minimum inside the region where all of `rooms` are positive, by sequential
    quadratic programming; `start` where none is found inside the region."""
    from scipy.optimize import minimize

    matrix = np.concatenate([limits.matrix, -limits.matrix])
    offset = np.concatenate([-limits.lower, limits.upper])
    keep = np.isfinite(offset)
    matrix, offset = matrix[keep], offset[keep]
    constraints = [{"type": "ineq", "fun": lambda v: matrix @ v + offset, "jac": lambda _: matrix}]
    constraints += [
        {
            "type": "ineq",
            "fun": lambda v, room=room: room(v)[0],
            "jac": lambda v, room=room: room(v)[1],
        }
        for room in rooms
    ]
    found = minimize(
        objective,
        start,
        jac=True,
        method="SLSQP",
        constraints=constraints,
        options={"maxiter": 200, "ftol": 1e-7},
    )
    v = np.asarray(found.x, dtype=float)
    usable = bool(np.all(np.isfinite(v))) and float(np.max(limits.excess(v))) < 1e-6
    return v if usable else start
