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

from synth.choosing.choose import DEFAULT_EFFORT, Choice, choose_values, level_limits_of
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal, LevelLimits
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
        By op-amp output net: the frequency of its peak [Hz], and the ratio by which the peak
        may still rise.
    seed, effort
        As of `choose_values`.
    """

    circuit: Circuit
    target: Complex
    frequency_hz: Real
    accept: Accept
    level_limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    seed: int = 1
    effort: int = DEFAULT_EFFORT

    def choose(self) -> Choice:
        """The values with the least error."""
        return choose_values(
            self.circuit,
            target=self.target,
            frequency_hz=self.frequency_hz,
            accept=self.accept,
            level_limits=dict(self.level_limits),
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
    def ceilings(self) -> LevelLimits | None:
        """How far op-amp outputs may rise, in the ln of the parts."""
        logs = np.log([p.ideal for p in self.circuit.passives])
        return level_limits_of(self.circuit, logs, dict(self.level_limits))

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

    def levels_hold(self, values: Real) -> bool:
        """Whether every op-amp output stays below its ceiling with `values`, shape (P,)."""
        return self.ceilings is None or self.ceilings.hold(np.log(values))

    def mean_squares(self, values: Real) -> Real:
        """Weighted mean square error of each board, values (boards, P), op-amps included."""
        return self.goal.mean_squares(self.program, np.atleast_2d(values))
