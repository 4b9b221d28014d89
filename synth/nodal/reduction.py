"""The nodal equations with the op-amps' input nets taken out, as polynomials in s.

Op-amp k gives v(-) = v(+) - a_k v(out), so the net at its - input needs no unknown (pivot exactly
1; the net at + serves where - cannot).  What remains is one unknown per op-amp output plus the
other passive nets, and every entry of the matrix is a polynomial in s of degree 2 at most,

    entry = sum over m of s^m * sum of (integer * quantity_i * quantity_j),

in the board's quantities: 1, then 1/R or C of every passive, 1/A0 of every op-amp, and
1/(2 pi GBW) of every op-amp, in this order.
"""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from synth.nodal.structure import Structure, Wiring

__all__ = ["DEGREE", "REMEMBERED", "Entry", "Reduction", "quantities", "reduce"]

Real = NDArray[np.float64]

DEGREE = 2
"""Largest power of s in an entry: a capacitor times the pole of one op-amp."""

REMEMBERED = 64
"""Wirings remembered with what follows from them: a design compiles the same one many times."""

Entry = dict[tuple[int, int, int], int]
"""Integer coefficients by (power of s, quantity i, quantity j), i <= j."""

_Voltage = dict[int, dict[int, int]]
"""A net as a combination of unknowns: column -> {-1: plain coefficient, k: coefficient of a_k}."""


@dataclass(frozen=True, eq=False)
class Reduction:
    """The reduced equations: sum over columns of entry * voltage = 0 in every row.

    Parameters
    ----------
    rows, columns
        Rows and unknown nets that remain, numbered as in `Structure`; equally many.
    source
        Column of the input, known to be 1 V.
    entries
        By (row, column), the source's column among them.
    pairs
        (op-amp, net) for every op-amp equation used up and the net it took out.
    flow
        The column every row determines when signals are followed: the output of the op-amp
        whose input net the row's currents meet at, or the row's own net.
    """

    rows: tuple[int, ...]
    columns: tuple[int, ...]
    source: int
    entries: dict[tuple[int, int], Entry]
    pairs: tuple[tuple[int, int], ...]
    flow: dict[int, int]

    def depths(self) -> dict[int, int]:
        """Steps of the signal flow from the source to every column it reaches."""
        readers: dict[int, list[int]] = {}
        for r, c in self.entries:
            readers.setdefault(c, []).append(self.flow[r])
        depth = {self.source: 0}
        queue = [self.source]
        for column in queue:
            for reached in readers.get(column, ()):
                if reached not in depth:
                    depth[reached] = depth[column] + 1
                    queue.append(reached)
        return depth

    def silent(self) -> frozenset[int]:
        """Columns that cannot answer to the source whatever the values are.

        Where every row holds the column it determines, these are the ones the signal flow does
        not reach; otherwise none is claimed.
        """
        if any((r, c) not in self.entries for r, c in self.flow.items()):
            return frozenset()
        return frozenset(self.columns) - self.depths().keys()

    def transposed(self, observed: int) -> Reduction:
        """The system whose unknowns psi solve M^T psi = unit vector at column `observed`."""
        return _transposed(self, observed)


def quantities(structure: Structure, values: Real, gain_bandwidth: Real, gain: Real) -> Real:
    """Quantities of every board, shape (1 + P + 2 U, boards), from arrays (boards, P or U)."""
    inverse = np.where(structure.is_resistor, 1.0 / values, values)
    one = np.ones((values.shape[0], 1))
    return np.concatenate([one, inverse, 1 / gain, 1 / (2 * np.pi * gain_bandwidth)], axis=1).T


def reduce(structure: Structure) -> Reduction:
    """Take the op-amps' input nets out of the nodal equations; the same object for circuits wired
    alike, as long as it is remembered."""
    return _reduced(structure.wiring)


@lru_cache(maxsize=REMEMBERED)
def _transposed(system: Reduction, observed: int) -> Reduction:
    entries = {(c, r): entry for (r, c), entry in system.entries.items() if c != system.source}
    entries[observed, system.source] = {(0, 0, 0): -1}
    flow = {column: row for row, column in system.flow.items()}
    return Reduction(system.columns, system.rows, system.source, entries, (), flow)


@lru_cache(maxsize=REMEMBERED)
def _reduced(wiring: Wiring) -> Reduction:
    n = wiring.size
    voltages, pairs = _taken_out(wiring)
    taken = {net for _, net in pairs}
    used = {k for k, _ in pairs}
    add = _Adder(len(wiring.ends), len(wiring.pins))
    rows: dict[int, dict[int, Entry]] = {}
    for k, (plus, minus, out) in enumerate(wiring.pins):
        if k not in used:
            row = rows.setdefault(out, defaultdict(dict))
            add(row, voltages[plus], 1)
            add(row, voltages[minus], -1)
            add(row, {out: {k: 1}}, -1)
    for part, (one, other) in enumerate(wiring.ends):
        load = (1 + part, 0 if wiring.is_resistor[part] else 1)
        for p, q in ((one, other), (other, one)):
            if p < n and p not in wiring.driver:
                row = rows.setdefault(p, defaultdict(dict))
                add(row, voltages[p], 1, load)
                add(row, voltages[q], -1, load)
    entries = {}
    for r, row in rows.items():
        for c, entry in row.items():
            kept = {key: value for key, value in entry.items() if value}
            if kept:
                entries[r, c] = kept
    columns = tuple(c for c in range(n) if c not in taken)
    flow = {r: r for r in rows} | {net: wiring.pins[k][2] for k, net in pairs}
    return Reduction(tuple(sorted(rows)), columns, n, entries, tuple(pairs), flow)


def _taken_out(wiring: Wiring) -> tuple[list[_Voltage], list[tuple[int, int]]]:
    """Every net as a combination of the unknowns that stay, and the (op-amp, net) pairs used."""
    n = wiring.size
    voltages: list[_Voltage] = [{k: {-1: 1}} for k in range(n + 1)]
    voltages.append({})  # ground
    pairs: list[tuple[int, int]] = []
    for k, (plus, minus, out) in enumerate(wiring.pins):
        equation: _Voltage = defaultdict(lambda: defaultdict(int))
        for voltage, sign in ((voltages[plus], 1), (voltages[minus], -1), ({out: {k: 1}}, -1)):
            for column, terms in voltage.items():
                for a, coefficient in terms.items():
                    equation[column][a] += sign * coefficient
        for net in (minus, plus):
            terms = {a: c for a, c in equation.get(net, {}).items() if c}
            fixed = net >= n or net in wiring.driver or net == wiring.output
            if fixed or set(terms) != {-1} or abs(terms[-1]) != 1:
                continue
            _substitute(voltages, net, equation, terms[-1])
            pairs.append((k, net))
            break
    return voltages, pairs


def _substitute(voltages: list[_Voltage], net: int, equation: _Voltage, pivot: int) -> None:
    """Replace `net` in all voltages by what the equation, pivot * v(net) + rest = 0, says."""
    rest = {
        column: {a: -pivot * c for a, c in terms.items() if c}
        for column, terms in equation.items()
        if column != net
    }
    for k, voltage in enumerate(voltages):
        if net not in voltage:
            continue
        factor = voltage[net][-1]
        merged: _Voltage = {c: dict(t) for c, t in voltage.items() if c != net}
        for column, terms in rest.items():
            target = merged.setdefault(column, {})
            for a, c in terms.items():
                target[a] = target.get(a, 0) + factor * c
        voltages[k] = {
            column: kept
            for column, terms in merged.items()
            if (kept := {a: c for a, c in terms.items() if c})
        }


@dataclass(frozen=True)
class _Adder:
    """Adds sign * admittance * voltage to a row; `load` is (quantity, power of s) of the
    admittance, the number 1 when left out."""

    passives: int
    amplifiers: int

    def __call__(
        self,
        row: dict[int, Entry],
        voltage: _Voltage,
        sign: int,
        load: tuple[int, int] = (0, 0),
    ) -> None:
        quantity, power = load
        for column, terms in voltage.items():
            entry = row[column]
            for a, coefficient in terms.items():
                for factor, extra in self._factors(a):
                    low, high = sorted((quantity, factor))
                    key = (power + extra, low, high)
                    entry[key] = entry.get(key, 0) + sign * coefficient

    def _factors(self, a: int) -> list[tuple[int, int]]:
        """(quantity, power of s) of the terms of a_k, of the number 1 for k = -1."""
        if a < 0:
            return [(0, 0)]
        first = 1 + self.passives + a
        return [(first, 0), (first + self.amplifiers, 1)]
