"""From ideal to standard values: the search, and what to say of it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.certificate import Certificate, certify
from synth.choosing.enumeration import best_of_all
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Ceilings, Goal, LinearModel, compensation
from synth.choosing.search import search_values
from synth.circuit import Circuit
from synth.job import Accept
from synth.nodal import NodalProgram, compile_circuit

__all__ = ["DEFAULT_EFFORT", "Choice", "choose_values", "with_ideals"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]

# Pairs of steps the search evaluates: about a second on one core.
DEFAULT_EFFORT = 60_000_000

# Ideal values stay near the chosen ones: what finite op-amp gain would only let through by
# large changes of the values is left.
IDEAL_RIDGE = 0.03


@dataclass(frozen=True, kw_only=True)
class Choice:
    """The outcome of a choice of values.

    Parameters
    ----------
    circuit
        With the chosen values; the `ideal` of the resistors are the values nearest to the
        chosen ones with which the circuit, capacitors as chosen, would show the target.
    nearest
        With each ideal value of the start rounded to its nearest neighbour.
    certificate
        How much better any other choice could be.
    looked
        How many pairs of steps along the series the search evaluated.
    """

    circuit: Circuit
    nearest: Circuit
    certificate: Certificate
    looked: int


def choose_values(
    circuit: Circuit,
    *,
    target: Complex,
    frequency_hz: Real,
    accept: Accept | None = None,
    level_limits: dict[str, tuple[float, float]] | None = None,
    seed: int = 1,
    effort: int = DEFAULT_EFFORT,
) -> Choice:
    """Values from the series of every part, for the least error of the whole response.

    Parameters
    ----------
    circuit
        With ideal values.
    target
        What the output must show, shape (F,), nowhere zero.
    frequency_hz
        Shape (F,) [Hz].
    accept
        Limits that weight magnitude against phase; None weights them alike.
    level_limits
        By op-amp output net: the frequency of its peak [Hz], and the ratio by which the peak
        may still rise.
    seed
        Of the random kicks.
    effort
        Pairs of steps the search evaluates; more take longer and find better values.
    """
    program = compile_circuit(circuit)
    grid = ValueGrid(circuit.passives)
    goal = Goal(target, frequency_hz)
    if accept is not None:
        goal = Goal.within(target, frequency_hz, accept)
    logs = np.log([p.ideal for p in circuit.passives])
    ideal = compile_circuit(with_ideal_op_amps(circuit))
    ceilings = Ceilings.of(program, np.exp(logs), level_limits or {})
    outcome = best_of_all(program, grid, goal, ceilings) or search_values(
        program,
        grid,
        goal,
        start_logs=logs,
        ideal=ideal,
        ceilings=ceilings,
        seed=seed,
        effort=effort,
    )
    index = outcome.index
    certificate = _certified(program, ideal, grid, goal, index)
    if certificate.better is not None:
        # Every choice was looked at: take the best, where the whole circuit confirms it.
        both = np.array([grid.values_at(k) for k in (index, certificate.better)])
        squares = goal.mean_squares(program, both)
        allowed = ceilings is None or bool(ceilings.keep(program, both[1:])[0])
        if squares[1] < squares[0] and allowed:
            index = certificate.better
            certificate = _certified(program, ideal, grid, goal, index)
    chosen = _with(circuit, grid.values_at(index))
    return Choice(
        circuit=with_ideals(chosen, goal),
        nearest=_with(circuit, grid.values_at(grid.nearest(logs))),
        certificate=certificate,
        looked=outcome.looked,
    )


def _certified(
    program: NodalProgram, ideal: NodalProgram, grid: ValueGrid, goal: Goal, index: Index
) -> Certificate:
    """How good the choice is, in the model about itself."""
    model = LinearModel.about(program, grid.values_at(index), goal, jacobian=ideal)
    return certify(grid, model, index)


def with_ideal_op_amps(circuit: Circuit) -> Circuit:
    """The same circuit with op-amps whose gain is as good as infinite."""
    return replace(
        circuit,
        amplifiers=tuple(
            replace(a, figures=replace(a.figures, gain_bandwidth=1e15, open_loop_gain=1e12))
            for a in circuit.amplifiers
        ),
    )


def _with(circuit: Circuit, values: Real) -> Circuit:
    refs = (p.ref for p in circuit.passives)
    return circuit.with_values(dict(zip(refs, map(float, values), strict=True)))


def with_ideals(circuit: Circuit, goal: Goal) -> Circuit:
    """Each resistor's `ideal` moved to the exact solution nearest to the chosen values."""
    values = np.array([p.value for p in circuit.passives])
    logs = np.log(values)
    free = ValueGrid(circuit.passives).resistors
    for _ in range(2):
        model = LinearModel.about(compile_circuit(circuit), np.exp(logs), goal)
        logs[free] -= compensation(model.matrix[:, free], IDEAL_RIDGE) @ model.offset
    return replace(
        circuit,
        passives=tuple(
            replace(p, ideal=float(np.exp(logs[k])) if free[k] else p.value)
            for k, p in enumerate(circuit.passives)
        ),
    )
