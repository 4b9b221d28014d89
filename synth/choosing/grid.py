"""The values each part may take, as indices into sorted tables of logarithms."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Passive

__all__ = ["ValueGrid"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# A list of values closer together than this, in ln, is as good as continuous; E192 has 0.012.
FINE_SPACING = 0.002


@dataclass(frozen=True, eq=False)
class ValueGrid:
    """Allowed values of the parts of a circuit.

    A part that is not bought (source resistance, load) or whose value the job states has its
    one value.  A part named in `near` has the values within that ratio of its ideal one, or all
    where there is none.  Index vectors have shape (P,), one index per part, into its own
    ascending list.
    """

    parts: tuple[Passive, ...]
    near: Mapping[str, float] = field(default_factory=dict)

    @cached_property
    def values(self) -> tuple[Real, ...]:
        """Allowed values of each part, ascending [ohm] or [F]."""
        return tuple(self._offered(part) for part in self.parts)

    def _offered(self, part: Passive) -> Real:
        if part.fixed or part.rule is None:
            return np.array([part.value])
        values = part.rule.values
        if part.ref not in self.near:
            return values
        close = np.abs(np.log(values / part.ideal)) <= np.log(self.near[part.ref])
        return values[close] if np.any(close) else values

    @cached_property
    def counts(self) -> Index:
        """Number of values of each part."""
        return np.array([v.size for v in self.values])

    @cached_property
    def logs(self) -> Real:
        """ln of the values, shape (P, longest list), padded with NaN."""
        table = np.full((len(self.parts), int(self.counts.max())), np.nan)
        for row, values in zip(table, self.values, strict=True):
            row[: values.size] = np.log(values)
        return table

    @cached_property
    def capacitors(self) -> NDArray[np.bool_]:
        """Which parts are capacitors, shape (P,)."""
        return np.array([p.kind == "capacitor" for p in self.parts])

    @cached_property
    def resistors(self) -> NDArray[np.bool_]:
        """Which parts are resistors with a choice, shape (P,)."""
        return np.array(
            [p.kind == "resistor" and p.rule is not None and not p.fixed for p in self.parts]
        )

    @cached_property
    def resistor_step(self) -> float:
        """Median step of the resistors along their series, in ln; 0 without a choice."""
        steps = [np.diff(np.log(v)) for v, r in zip(self.values, self.resistors, strict=True) if r]
        every = np.concatenate([np.zeros(0), *steps])
        return float(np.median(every)) if every.size else 0.0

    @cached_property
    def fine(self) -> NDArray[np.bool_]:
        """Which parts have a list as good as continuous, as two resistors for one may have."""
        steps = [np.diff(np.log(v)) for v in self.values]
        return np.array([s.size > 0 and float(np.median(s)) < FINE_SPACING for s in steps])

    def nearest(self, logs: Real) -> Index:
        """Index of the value nearest to each part's logarithm, shape (P,)."""
        out = np.empty(logs.size, dtype=np.intp)
        coarse, table = self._coarse
        out[coarse] = np.nanargmin(np.abs(table - logs[coarse, None]), axis=1)
        for k in np.flatnonzero(self.fine):
            # Long lists by bisection: the first value not below the middle of its neighbours.
            row = self.logs[k, : self.counts[k]]
            out[k] = np.searchsorted((row[1:] + row[:-1]) / 2, logs[k])
        return out

    @cached_property
    def _coarse(self) -> tuple[Index, Real]:
        """The parts with short lists, and the logarithms of these."""
        rows = np.flatnonzero(~self.fine)
        longest = int(self.counts[rows].max(initial=1))
        return rows, self.logs[rows, :longest]

    def holds(self, values: Real) -> bool:
        """Whether every part may have its value."""
        return all(bool(np.any(v == x)) for v, x in zip(self.values, values, strict=True))

    def logs_at(self, index: Index) -> Real:
        """ln of the values at an index vector."""
        return self.logs[np.arange(index.size), index]

    def values_at(self, index: Index) -> Real:
        """The values at an index vector, as the tables spell them."""
        return np.array([v[k] for v, k in zip(self.values, index, strict=True)])
