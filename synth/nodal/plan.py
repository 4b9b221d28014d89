"""Plans: everything about solving one system that can be settled before the values are known.

Rows and columns are scaled per board so that as many entries as possible become exactly 1: entries
that do not depend on frequency, one for every edge of a spanning forest between rows and columns.
Scaling costs nothing over frequency, since it goes into the coefficients of the other entries, and
an entry of 1 is a pivot without a division and a factor without a product.  The elimination is
then written as a tape (`synth.nodal.elimination`), which runs over (boards, frequencies).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.nodal.elimination import eliminate
from synth.nodal.reduction import DEGREE, Entry, Reduction
from synth.nodal.tape import Signed, Tape, TapeWriter

__all__ = ["Plan", "plan"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Key = tuple[int, int]


@dataclass(frozen=True)
class _Edge:
    """Scale of row or column `target` that makes entry `key` a 1."""

    target: int
    is_row: bool
    key: Key


@dataclass(frozen=True, eq=False)
class _Sums:
    """Coefficients of all entries as sums of weight * quantity[left] * quantity[right].

    Sum k runs from term ``starts[k]`` to the next start and is coefficient ``places[k]``, an
    (entry, power of s).  Summed without BLAS, whose threads cost more than they bring here.
    """

    entries: int
    left: NDArray[np.intp]
    right: NDArray[np.intp]
    weights: Real
    starts: NDArray[np.intp]
    places: NDArray[np.intp]

    def evaluate(self, quantity: Real) -> Real:
        """Shape (entries, DEGREE + 1, boards) from quantities (quantities, boards)."""
        out = np.zeros((self.entries, DEGREE + 1, quantity.shape[1]))
        if self.starts.size:
            terms = quantity[self.left]
            terms *= quantity[self.right]
            terms *= self.weights
            out[self.places[:, 0], self.places[:, 1]] = np.add.reduceat(terms, self.starts, axis=0)
        return out


@dataclass(frozen=True, eq=False)
class Plan:
    """One way to solve a system for some of its unknowns.

    Parameters
    ----------
    keys
        The entries that are stored: first those the tape loads, then those scaled to 1.
    loaded
        How many the tape loads.
    sums
        How the coefficients of the entries follow from the quantities.
    edges
        In the order in which the scales follow from each other.
    wanted
        Columns the tape solves for.
    tape
        Over (boards, frequencies).
    """

    keys: tuple[Key, ...]
    loaded: int
    sums: _Sums
    edges: tuple[_Edge, ...]
    wanted: tuple[int, ...]
    tape: Tape

    def solve(self, quantity: Real, s: Complex) -> Complex:
        """The wanted unknowns, shape (wanted, boards, F).

        `quantity` shape (quantities, boards) as `synth.nodal.reduction.quantities` gives them,
        `s` shape (F,) [rad/s].
        """
        boards = quantity.shape[1]
        coefficients = self.sums.evaluate(quantity)
        rows, columns = self._scales(coefficients)
        loaded = np.empty((self.loaded, boards, DEGREE + 1))
        for k, (r, c) in enumerate(self.keys[: self.loaded]):
            scale = _product(rows.get(r), columns.get(c))
            entry = coefficients[k].T
            if scale is None:
                loaded[k] = entry
            else:
                np.multiply(entry, scale[:, None], out=loaded[k])
        basis = np.stack([(s**m).view(float) for m in range(DEGREE + 1)])
        out = np.empty((len(self.wanted), boards, s.size), dtype=complex)
        self.tape.run(loaded, basis, out)
        for k, column in enumerate(self.wanted):
            if column in columns:
                out[k] *= columns[column][:, None]
        return out

    def _scales(self, coefficients: Real) -> tuple[dict[int, Real], dict[int, Real]]:
        """Scales of rows and columns, shape (boards,) each; missing ones are 1."""
        position = {key: k for k, key in enumerate(self.keys)}
        rows: dict[int, Real] = {}
        columns: dict[int, Real] = {}
        for edge in self.edges:
            size = np.abs(coefficients[position[edge.key], 0])
            own, other = (rows, columns) if edge.is_row else (columns, rows)
            known = other.get(edge.key[1] if edge.is_row else edge.key[0])
            own[edge.target] = 1.0 / size if known is None else 1.0 / (size * known)
        return rows, columns


def plan(
    system: Reduction,
    wanted: tuple[int, ...],
    generator: np.random.Generator,
    *,
    along_flow: bool = False,
) -> Plan:
    """A plan that solves for the columns `wanted`, ties broken by the generator.

    `along_flow` and the error it may raise are those of `synth.nodal.elimination.eliminate`.
    """
    edges, units = _forest(system, wanted, generator)
    keys = [key for key in system.entries if key not in units]
    writer = TapeWriter()
    matrix = {key: writer.load(k) for k, key in enumerate(keys)}
    matrix |= {key: Signed(sign, None) for key, sign in units.items()}
    results = eliminate(writer, matrix, system, wanted, generator, along_flow=along_flow)
    stored = (*keys, *units)
    return Plan(
        keys=stored,
        loaded=len(keys),
        sums=_sums([system.entries[key] for key in stored]),
        edges=edges,
        wanted=wanted,
        tape=writer.finished(results),
    )


def _forest(
    system: Reduction, wanted: tuple[int, ...], generator: np.random.Generator
) -> tuple[tuple[_Edge, ...], dict[Key, int]]:
    """Edges of a spanning forest over entries that can be scaled to +-1, and their signs.

    The source column keeps scale 1, and so does a single wanted column.
    """
    fixed = [("c", system.source)] + ([("c", wanted[0])] if len(wanted) == 1 else [])
    signs = {key: sign for key, e in system.entries.items() if (sign := _constant_sign(e))}
    keys = list(signs)
    generator.shuffle(keys)
    neighbours: dict[tuple[str, int], list[Key]] = {}
    for key in keys:
        neighbours.setdefault(("r", key[0]), []).append(key)
        neighbours.setdefault(("c", key[1]), []).append(key)
    edges: list[_Edge] = []
    units: dict[Key, int] = {}
    seen: set[tuple[str, int]] = set(fixed)
    for start in (*fixed, *neighbours):
        if start in seen and start not in fixed:
            continue
        seen.add(start)
        queue = [start]
        while queue:
            kind, number = queue.pop(int(generator.integers(len(queue))))
            for key in neighbours.get((kind, number), ()):
                other = ("c", key[1]) if kind == "r" else ("r", key[0])
                if other not in seen:
                    seen.add(other)
                    queue.append(other)
                    edges.append(_Edge(other[1], other[0] == "r", key))
                    units[key] = signs[key]
    return tuple(edges), units


def _constant_sign(entry: Entry) -> int:
    """The sign of an entry that depends on no frequency and never vanishes; 0 of any other."""
    if any(power for power, _, _ in entry):
        return 0
    signs = {1 if weight > 0 else -1 for weight in entry.values()}
    return signs.pop() if len(signs) == 1 else 0


def _sums(entries: list[Entry]) -> _Sums:
    terms: list[tuple[int, int, int]] = []
    starts: list[int] = []
    places: list[tuple[int, int]] = []
    for k, entry in enumerate(entries):
        for power in range(DEGREE + 1):
            own = [(i, j, weight) for (m, i, j), weight in sorted(entry.items()) if m == power]
            if own:
                starts.append(len(terms))
                places.append((k, power))
                terms += own
    left, right, weights = np.array(terms, dtype=np.intp).reshape(-1, 3).T
    return _Sums(
        len(entries),
        left,
        right,
        weights.astype(float)[:, None],
        np.array(starts, dtype=np.intp),
        np.array(places, dtype=np.intp).reshape(-1, 2),
    )


def _product(x: Real | None, y: Real | None) -> Real | None:
    if x is None or y is None:
        return y if x is None else x
    return x * y
