"""What a choice of values is for, in one value: the circuit, what it must show, its limits.

`choose_values` is one way of carrying a task out; sharing values and pairs of resistors are
built on it and need the same things again.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.choosing.choose import DEFAULT_EFFORT, Choice, choose_values
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Ceilings, Goal, Level
from synth.circuit import Circuit
from synth.evidence import DB_PER_NEPER, response_error
from synth.job import Accept
from synth.nodal import NodalProgram, compile_circuit

__all__ = ["Task"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True, eq=False, kw_only=True)
class Task:
    """A choice of values to be made.

    Parameters
    ----------
    circuit
        With ideal values.
    target
        What the output must show, shape (F,), nowhere zero.
    frequency_hz
        Shape (F,) [Hz].
    accept
        The limits of the response.
    level_limits
        By op-amp output net: how far it may rise.
    seed, effort
        As of `choose_values`.
    """

    circuit: Circuit
    target: Complex
    frequency_hz: Real
    accept: Accept
    level_limits: Mapping[str, Level] = field(default_factory=dict)
    seed: int = 1
    effort: int = DEFAULT_EFFORT

    def choose(self, *, known: Circuit | None = None) -> Choice:
        """The values with the least error, better than those of `known`."""
        return choose_values(
            self.circuit,
            target=self.target,
            frequency_hz=self.frequency_hz,
            accept=self.accept,
            level_limits=self.level_limits,
            known=known,
            seed=self.seed,
            effort=self.effort,
        )

    def with_circuit(self, circuit: Circuit) -> Task:
        """The same with another circuit."""
        return replace(self, circuit=circuit)

    @cached_property
    def program(self) -> NodalProgram:
        """The circuit compiled."""
        return compile_circuit(self.circuit)

    @cached_property
    def grid(self) -> ValueGrid:
        """The values on offer."""
        return ValueGrid(self.circuit.passives)

    @cached_property
    def goal(self) -> Goal:
        """The response, weighted by the limits."""
        return Goal.within(self.target, self.frequency_hz, self.accept)

    @cached_property
    def ceilings(self) -> Ceilings | None:
        """How large the op-amp outputs may be."""
        ideal = np.array([p.ideal for p in self.circuit.passives])
        return Ceilings.of(self.program, ideal, self.level_limits)

    @property
    def limit_rms(self) -> float:
        """Weighted rms error of a board that is at both limits at every frequency."""
        magnitude = self.goal.magnitude_weight * self.accept.magnitude_db / DB_PER_NEPER
        phase = self.goal.phase_weight * np.radians(self.accept.phase_deg)
        return float(np.hypot(magnitude, phase))

    def shares(self, values: Real) -> Real:
        """Largest error of each board, values (boards, P), as a share of its limit: the worse
        of magnitude and phase, shape (boards,)."""
        response = self.program.solve(self.frequency_hz, values=np.atleast_2d(values))
        error = response_error(response, self.target)
        magnitude = np.max(np.abs(error.magnitude_db), axis=-1) / self.accept.magnitude_db
        phase = np.max(np.abs(error.phase_deg), axis=-1) / self.accept.phase_deg
        return np.asarray(np.maximum(magnitude, phase))

    def levels_hold(self, values: Real) -> NDArray[np.bool_]:
        """Whether every op-amp output stays below its ceiling, values (boards, P), (boards,)."""
        boards = np.atleast_2d(values)
        if self.ceilings is None:
            return np.ones(boards.shape[0], dtype=bool)
        return self.ceilings.keep(self.program, boards)

    def stock_holds(self, values: Real) -> bool:
        """Whether the drawers hold as many parts of each value as `values` (P,) ask for."""
        asked: dict[tuple[str, float], int] = {}
        for part, value in zip(self.circuit.passives, values.tolist(), strict=True):
            if part.rule is None:
                continue
            asked[part.kind, value] = asked.get((part.kind, value), 0) + 1
            count = part.rule.count_of(value)
            if count is not None and asked[part.kind, value] > count:
                return False
        return True

    def mean_squares(self, values: Real) -> Real:
        """Weighted mean square error of each board, values (boards, P), op-amps included."""
        return self.goal.mean_squares(self.program, np.atleast_2d(values))
