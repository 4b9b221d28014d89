"""Sparse elimination of small polynomial systems, ordered once and written as a tape.

Rows and columns are first scaled per board so that as many entries as possible become exactly 1:
entries that do not depend on frequency, one for every edge of a spanning forest between rows and
columns.  Scaling costs nothing over frequency, since it goes into the coefficients of the other
entries, and an entry of 1 is a pivot without a division and a factor without a product.  Then a
greedy elimination takes the pivot whose updates cost least (Markowitz 1957, with measured times
of the operations in the place of fill-in counts).

Free to take any pivot, it finds the cheapest tapes, and they serve one unknown well: H comes out
as a ratio of two sums of products.  Unknowns far smaller than others lose digits that way.  Along
the signal flow no digits are lost: every row may only determine the net it drives in the circuit,
and what lies farthest from the source is eliminated first.  On loops of eight integrators, nine
decades wide, that keeps all unknowns to 1e-14 where other orders lose everything (measured).
Which plan is good enough is measured in `synth.nodal.engine`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.nodal.reduction import DEGREE, Entry, Reduction
from synth.nodal.tape import COSTS, Signed, Tape, TapeWriter

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

    With free pivots, a single column wanted is eliminated last, so that no back-substitution is
    needed; with `along_flow` the circuit's signal flow sets the order.

    Raises
    ------
    ArithmeticError
        The signal flow asks for a pivot that is not there.
    """
    edges, units = _forest(system, wanted, generator)
    keys = [key for key in system.entries if key not in units]
    writer = TapeWriter()
    matrix = {key: writer.load(k) for k, key in enumerate(keys)}
    matrix |= {key: Signed(sign, None) for key, sign in units.items()}
    elimination = _Elimination(writer, matrix, system, wanted, along_flow)
    results = elimination.run(generator)
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
    fixed = {("c", system.source)} | ({("c", wanted[0])} if len(wanted) == 1 else set())
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
    nodes = [*fixed, *(node for node in neighbours if node not in fixed)]
    for start in sorted(nodes, key=lambda node: node not in fixed):
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


class _Matrix:
    """Entries by row and by column, for the rows and columns still to be eliminated."""

    def __init__(self, entries: dict[Key, Signed], columns: tuple[int, ...]) -> None:
        self.rows: dict[int, dict[int, Signed]] = {}
        self.columns: dict[int, set[int]] = {c: set() for c in columns}
        for (r, c), value in entries.items():
            self.put(r, c, value)

    def put(self, r: int, c: int, value: Signed) -> None:
        self.rows.setdefault(r, {})[c] = value
        if c in self.columns:
            self.columns[c].add(r)

    def drop(self, r: int, c: int) -> None:
        for j in self.rows.pop(r):
            if j in self.columns:
                self.columns[j].discard(r)
        del self.columns[c]


class _Elimination:
    """Forward elimination of all columns, then back-substitution of those wanted."""

    def __init__(
        self,
        writer: TapeWriter,
        entries: dict[Key, Signed],
        system: Reduction,
        wanted: tuple[int, ...],
        along_flow: bool,
    ) -> None:
        self.writer, self.source, self.wanted = writer, system.source, wanted
        self.matrix = _Matrix(entries, system.columns)
        self.flow = system.flow if along_flow else None
        self.depth = system.depths() if along_flow else {}
        self.last = wanted[0] if len(wanted) == 1 and not along_flow else None
        self.done: list[tuple[int, dict[int, Signed]]] = []

    def run(self, generator: np.random.Generator) -> list[Signed]:
        """The wanted unknowns; 0 for one that does not answer to the source."""
        matrix = self.matrix
        while matrix.columns:
            candidates = [
                (-self.depth.get(c, 0), _cost(matrix, r, c) + generator.random(), r, c)
                for c, rows in matrix.columns.items()
                for r in rows
                if (self.flow is None or self.flow[r] == c)
                and (c != self.last or len(matrix.columns) == 1)
            ]
            if not candidates:
                raise ArithmeticError("no pivot is left where the signal flow asks for one")
            *_, r, c = min(candidates)
            row = dict(matrix.rows[r])
            _update(self.writer, matrix, r, c)
            matrix.drop(r, c)
            self.done.append((c, row))
        return self._back_substituted()

    def _back_substituted(self) -> list[Signed]:
        solved: dict[int, Signed] = {self.source: Signed(1, None)}
        for c, row in reversed(self.done):
            if self.last is not None and c != self.last:
                break
            total: Signed | None = None
            for j, value in row.items():
                if j != c and j in solved:
                    product = self.writer.multiply(value, solved[j])
                    total = product if total is None else self.writer.subtract(total, -product)
            if total is not None:
                solved[c] = self.writer.divide(-total, row[c])
        return [solved.get(c, Signed(0, None)) for c in self.wanted]


def _cost(matrix: _Matrix, r: int, c: int) -> float:
    """Time of the updates that pivot (r, c) causes, per sample [ns]."""
    row = matrix.rows[r]
    down = [matrix.rows[i] for i in matrix.columns[c] if i != r]
    across = [(j, v) for j, v in row.items() if j != c]
    if not down or not across:
        return 0.0
    full_down = sum(other[c].value is not None for other in down)
    full_across = sum(v.value is not None for _, v in across)
    total, unit = 0.0, row[c].value is None
    if not unit:
        # The smaller side is divided by the pivot; all of it is full afterwards.
        total += COSTS["reciprocal"] + COSTS["multiply"] * min(full_down, full_across)
    divide_down = not unit and full_down <= full_across
    for other in down:
        for j, value in across:
            left_full = other[c].value is not None or divide_down
            right_full = value.value is not None or (not unit and not divide_down)
            total += COSTS["multiply"] * (left_full and right_full)
            total += COSTS["add"] if j in other else 0.1
    return total


def _update(writer: TapeWriter, matrix: _Matrix, r: int, c: int) -> None:
    row = matrix.rows[r]
    pivot = row[c]
    down = [i for i in sorted(matrix.columns[c]) if i != r]
    across = {j: v for j, v in row.items() if j != c}
    factors = {i: matrix.rows[i][c] for i in down}
    if down and across and pivot.value is not None:
        full_down = sum(v.value is not None for v in factors.values())
        full_across = sum(v.value is not None for v in across.values())
        if full_down <= full_across:
            factors = _divided(writer, factors, pivot)
        else:
            across = _divided(writer, across, pivot)
    elif pivot.value is None:
        factors = {i: Signed(v.sign * pivot.sign, v.value) for i, v in factors.items()}
    for i in down:
        target = matrix.rows[i]
        for j, value in across.items():
            product = writer.multiply(factors[i], value)
            matrix.put(i, j, writer.subtract(target.get(j), product))
        del target[c]


def _divided(writer: TapeWriter, values: dict[int, Signed], pivot: Signed) -> dict[int, Signed]:
    """All values over the pivot: one division, or one reciprocal for several."""
    if len(values) == 1:
        return {k: writer.divide(v, pivot) for k, v in values.items()}
    inverse = writer.divide(Signed(1, None), pivot)
    return {k: writer.multiply(v, inverse) for k, v in values.items()}
