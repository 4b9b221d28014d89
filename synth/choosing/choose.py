"""From ideal to standard values: the search, and what to say of it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.grid import ValueGrid
from synth.choosing.model import LevelLimits, LinearModel, compensation
from synth.choosing.search import search_values
from synth.circuit import Circuit
from synth.nodal import compile_circuit

__all__ = ["DEFAULT_EFFORT", "Choice", "choose_values"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

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
    looked
        How many pairs of steps along the series the search evaluated.
    """

    circuit: Circuit
    nearest: Circuit
    looked: int


def choose_values(
    circuit: Circuit,
    *,
    target: Complex,
    frequency_hz: Real,
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
    ideal = np.log([p.ideal for p in circuit.passives])
    outcome = search_values(
        program,
        grid,
        start_logs=ideal,
        target=target,
        frequency_hz=frequency_hz,
        limits=_limits(program.circuit, ideal, level_limits or {}),
        seed=seed,
        effort=effort,
    )
    chosen = _with(circuit, grid.values_at(outcome.index))
    return Choice(
        circuit=_with_ideals(chosen, grid, target, frequency_hz),
        nearest=_with(circuit, grid.values_at(grid.nearest(ideal))),
        looked=outcome.looked,
    )


def _with(circuit: Circuit, values: Real) -> Circuit:
    refs = (p.ref for p in circuit.passives)
    return circuit.with_values(dict(zip(refs, map(float, values), strict=True)))


def _limits(
    circuit: Circuit, ideal: Real, levels: dict[str, tuple[float, float]]
) -> LevelLimits | None:
    """Ceilings as linear limits in the ln of the parts."""
    if not levels:
        return None
    program = compile_circuit(circuit)
    rows = [
        program.sensitivities([peak_hz], values=np.exp(ideal), net=net).passives[0].real
        for net, (peak_hz, _) in levels.items()
    ]
    # An output already above its ceiling must not be pushed further; that it cannot be
    # brought below by the values is for the swing check to say.
    slack = [max(float(np.log(ratio)), 0.0) for _, ratio in levels.values()]
    return LevelLimits(np.array(rows), np.array(slack), ideal)


def _with_ideals(circuit: Circuit, grid: ValueGrid, target: Complex, frequency_hz: Real) -> Circuit:
    """Each resistor's `ideal` moved to the exact solution nearest to the chosen values."""
    values = np.array([p.value for p in circuit.passives])
    logs = np.log(values)
    free = grid.resistors
    for _ in range(2):
        model = LinearModel.about(compile_circuit(circuit), np.exp(logs), target, frequency_hz)
        logs[free] -= compensation(model.matrix[:, free], IDEAL_RIDGE) @ model.offset
    return replace(
        circuit,
        passives=tuple(
            replace(p, ideal=float(np.exp(logs[k])) if free[k] else p.value)
            for k, p in enumerate(circuit.passives)
        ),
    )
