"""Sparse elimination of small polynomial systems, written as a tape.

A greedy elimination takes the pivot whose updates cost least (Markowitz 1957, with measured times
of the operations in the place of fill-in counts).

Free to take any pivot, it finds the cheapest tapes, and they serve one unknown well: H comes out
as a ratio of two sums of products.  Unknowns far smaller than others lose digits that way.  Along
the signal flow no digits are lost: every row may only determine the net it drives in the circuit,
and what lies farthest from the source is eliminated first.  On loops of eight integrators, nine
decades wide, that keeps all unknowns to 1e-14 where other orders lose everything (measured).
Which of them is good enough is measured in `synth.nodal.engine`.
"""

from __future__ import annotations

import numpy as np

from synth.nodal.reduction import Reduction
from synth.nodal.tape import COSTS, Signed, TapeWriter

__all__ = ["eliminate"]

Key = tuple[int, int]


def eliminate(
    writer: TapeWriter,
    entries: dict[Key, Signed],
    system: Reduction,
    wanted: tuple[int, ...],
    generator: np.random.Generator,
    *,
    along_flow: bool,
) -> list[Signed]:
    """Write the steps that solve a system for the columns `wanted`; the values of these.

    `entries` holds every entry of the system as a value of the tape.  With free pivots, a single
    column wanted is eliminated last, so that no back-substitution is needed; with `along_flow`
    the circuit's signal flow sets the order.  The generator breaks ties.

    Raises
    ------
    ArithmeticError
        The signal flow asks for a pivot that is not there.
    """
    flow = system.flow if along_flow else None
    depth = system.depths() if along_flow else {}
    last = wanted[0] if len(wanted) == 1 and not along_flow else None
    matrix = _Matrix(entries, system.columns)
    done: list[tuple[int, dict[int, Signed]]] = []
    while matrix.columns:
        candidates = [
            (-depth.get(c, 0), _cost(matrix, r, c) + generator.random(), r, c)
            for c, rows in matrix.columns.items()
            for r in rows
            if (flow is None or flow[r] == c) and (c != last or len(matrix.columns) == 1)
        ]
        if not candidates:
            raise ArithmeticError("no pivot is left where one is asked for")
        *_, r, c = min(candidates)
        done.append((c, dict(matrix.rows[r])))
        _update(writer, matrix, r, c)
        matrix.drop(r, c)
    solved: dict[int, Signed] = {system.source: Signed(1, None)}
    for c, row in reversed(done if last is None else done[-1:]):
        total: Signed | None = None
        for j, value in row.items():
            if j != c and j in solved:
                product = writer.multiply(value, solved[j])
                total = product if total is None else writer.subtract(total, -product)
        if total is not None:
            solved[c] = writer.divide(-total, row[c])
    return [solved.get(c, Signed(0, None)) for c in wanted]


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
