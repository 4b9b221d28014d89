"""From ideal to standard values: the search, and what to say of it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.certificate import Certificate
from synth.choosing.enumeration import best_of_all
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Ceilings, Goal, Level, LinearModel, compensation
from synth.choosing.search import SearchOutcome, search_values
from synth.choosing.settling import Problem, settle
from synth.choosing.supply import Supply, check_supply
from synth.circuit import Circuit
from synth.job import Accept
from synth.nodal import compile_circuit

__all__ = [
    "DEFAULT_EFFORT",
    "Choice",
    "choose_values",
    "with_ideal_op_amps",
    "with_ideals",
]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]

# Pairs of steps the search evaluates: a second or two on one core.
DEFAULT_EFFORT = 100_000_000

# Share of the effort for choosing parts exactly, some at a time, after the search.
SETTLING_SHARE = 0.6

# The search leaves the impedance of each cell within this ratio of where the scaling put it,
# either way: the response does not show it, but noise, offset and currents do.
SIZE_RANGE = 2.5

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
    notices
        What the user should know of the choice, one sentence each.
    """

    circuit: Circuit
    nearest: Circuit
    certificate: Certificate
    looked: int
    notices: tuple[str, ...] = ()


def choose_values(
    circuit: Circuit,
    *,
    target: Complex,
    frequency_hz: Real,
    accept: Accept | None = None,
    level_limits: Mapping[str, Level] | None = None,
    known: Circuit | None = None,
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
        By op-amp output net: how far it may rise.
    known
        The same parts with values from the series, to be improved on: the choice is never
        worse than these, as long as they keep the level limits.
    seed
        Of the random kicks.
    effort
        Pairs of steps the search evaluates; more take longer and find better values.

    Raises
    ------
    RealizationError
        The stock has fewer parts than the circuit needs.
    """
    check_supply(circuit.passives)
    goal = Goal(target, frequency_hz)
    if accept is not None:
        goal = Goal.within(target, frequency_hz, accept)
    program = compile_circuit(circuit)
    logs = np.log([p.ideal for p in circuit.passives])
    near, everything = ValueGrid(circuit.passives, _sizes(circuit)), ValueGrid(circuit.passives)
    problem = Problem(
        program=program,
        ideal=compile_circuit(with_ideal_op_amps(circuit)),
        goal=goal,
        grid=near,
        ceilings=Ceilings.of(program, np.exp(logs), level_limits or {}),
        supply=Supply.of(near),
    )
    start = None if known is None else np.log([p.value for p in known.passives])
    outcome = _searched(problem, logs, start, seed, effort)
    if not np.isfinite(problem.judged(outcome.index[None])[0]):
        # Nothing was found between ceilings and floors: the rails come first.
        problem = problem.eased(everything)
        outcome = _searched(problem, logs, start, seed, effort)
    if not np.isfinite(problem.judged(outcome.index[None])[0]):
        # Values do not undo what the op-amps do to the levels: that is for the swing check to say.
        problem = problem.raised(np.exp(logs))
        outcome = _searched(problem, logs, start, seed, effort)
    best, certificate, more = settle(
        problem,
        outcome.index,
        rng=np.random.default_rng(seed),
        effort=int(SETTLING_SHARE * effort),
    )
    return Choice(
        circuit=with_ideals(_with(circuit, problem.grid.values_at(best)), goal),
        nearest=_with(circuit, everything.values_at(everything.nearest(logs))),
        certificate=certificate,
        looked=outcome.looked + more,
    )


def _searched(
    problem: Problem, logs: Real, known: Real | None, seed: int, effort: int
) -> SearchOutcome:
    """The outcome of the search from the ideal values, `logs` their ln; `known` is that of a
    choice to be improved on."""
    if problem.supply is None:
        few = best_of_all(problem.program, problem.grid, problem.goal, problem.ceilings)
        if few is not None:
            return few
    return search_values(
        problem.program,
        problem.grid,
        problem.goal,
        start_logs=logs,
        ideal=problem.ideal,
        ceilings=problem.ceilings,
        supply=problem.supply,
        known=None if known is None else problem.grid.nearest(known),
        seed=seed,
        effort=effort,
    )


def _sizes(circuit: Circuit) -> dict[str, float]:
    """The parts that set the impedance of a cell, and how far each may leave where the scaling
    put it: capacitors, feedback resistors, both resistors of an inverter, and what balances the
    two inputs of an op-amp.  A drawer holds too few values to be choosy."""
    refs = [c.feedback for c in circuit.cells]
    refs += [c.balance for c in circuit.cells if c.balance]
    refs += [r for c in circuit.cells if c.kind == "inverter" for r in c.inputs]
    parts = (circuit.by_ref[r] for r in refs)
    return {p.ref: SIZE_RANGE for p in parts if p.rule is not None and not p.rule.stock}


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
