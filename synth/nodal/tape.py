"""A straight list of array operations, and the machine that runs it.

Every value is an array over (boards, frequencies).  A tape is written in single assignment, each
instruction making one new value from earlier ones; then values nobody needs are dropped and the
rest share a few buffers, small enough that a chunk of boards stays in the processor's cache.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["COSTS", "Signed", "Tape", "TapeWriter"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

COSTS = {
    "load": 0.8,
    "multiply": 0.55,
    "add": 0.8,
    "subtract": 0.8,
    "reciprocal": 2.5,
    "divide": 2.5,
}
"""Rough time of an operation per sample [ns], measured; only their ratios matter."""

CHUNK = 8192
"""Samples (boards times frequencies) run at once: 128 KiB a buffer."""


class Signed(NamedTuple):
    """A value of the tape times +1 or -1; `value` None stands for the number 1."""

    sign: int
    value: int | None

    def __neg__(self) -> Signed:
        return Signed(-self.sign, self.value)


class _Step(NamedTuple):
    code: str
    left: int | None
    right: int | None


@dataclass
class TapeWriter:
    """Collects instructions; every method returns the value it made."""

    steps: list[_Step] = field(default_factory=list)

    def load(self, entry: int) -> Signed:
        """Entry number `entry` of the matrix."""
        return self._emit("load", entry, None)

    def multiply(self, x: Signed, y: Signed) -> Signed:
        """The product x y; free where either is 1."""
        sign = x.sign * y.sign
        if x.value is None or y.value is None:
            return Signed(sign, y.value if x.value is None else x.value)
        return Signed(sign, self._emit("multiply", x.value, y.value).value)

    def subtract(self, x: Signed | None, y: Signed) -> Signed:
        """x - y, where None is 0."""
        if x is None:
            return -y
        if x.sign == y.sign:
            return Signed(x.sign, self._emit("subtract", x.value, y.value).value)
        return Signed(x.sign, self._emit("add", x.value, y.value).value)

    def divide(self, x: Signed, y: Signed) -> Signed:
        """The quotient x / y; free where y is 1."""
        sign = x.sign * y.sign
        if y.value is None:
            return Signed(sign, x.value)
        if x.value is None:
            return Signed(sign, self._emit("reciprocal", y.value, None).value)
        return Signed(sign, self._emit("divide", x.value, y.value).value)

    def _emit(self, code: str, left: int | None, right: int | None) -> Signed:
        self.steps.append(_Step(code, left, right))
        return Signed(1, len(self.steps) - 1)

    def finished(self, results: list[Signed]) -> Tape:
        """The tape that computes `results`."""
        return _with_buffers(self.steps, results)


@dataclass(frozen=True, eq=False)
class Tape:
    """Instructions over buffers.

    Parameters
    ----------
    steps
        (code, output buffer, left, right): operands are buffers, for ``"load"`` the left one
        is the number of an entry; -1 stands for the number 1.
    buffers
        How many buffers it needs.
    results
        Buffer and sign of every result.
    """

    steps: tuple[tuple[str, int, int, int], ...]
    buffers: int
    results: tuple[Signed, ...]

    @property
    def cost(self) -> float:
        """Estimated time per sample [ns]."""
        return sum(COSTS[step[0]] for step in self.steps)

    def run(self, coefficients: Real, basis: Real, out: Complex) -> None:
        """Fill `out` with the results.

        Parameters
        ----------
        coefficients
            Of the entries in powers of s, shape (entries, boards, degree + 1).
        basis
            Powers of s as pairs of (real, imaginary), shape (degree + 1, 2 F).
        out
            Shape (results, boards, F).
        """
        boards, frequencies = out.shape[1:]
        width = max(1, min(boards, CHUNK // max(frequencies, 1)))
        work = np.empty((self.buffers, width, frequencies), dtype=complex)
        program: list[_Call] = []
        loads: list[tuple[int, int]] = []
        bound = 0
        for start in range(0, boards, width):
            stop = min(start + width, boards)
            if stop - start != bound:
                bound = stop - start
                program, loads = self._bound(work[:, :bound], coefficients, basis)
            for position, entry in loads:
                program[position] = program[position]._replace(left=coefficients[entry, start:stop])
            for call in program:
                call.function(*call[1:])
            for k, result in enumerate(self.results):
                if result.value is None:
                    out[k, start:stop] = result.sign
                elif result.sign > 0:
                    out[k, start:stop] = work[result.value, :bound]
                else:
                    np.negative(work[result.value, :bound], out[k, start:stop])

    def _bound(
        self, work: Complex, coefficients: Real, basis: Real
    ) -> tuple[list[_Call], list[tuple[int, int]]]:
        """The instructions with their arrays, and (position, entry) of every load."""
        program, loads = [], []
        for position, (code, out, left, right) in enumerate(self.steps):
            target = work[out]
            if code == "load":
                loads.append((position, left))
                program.append(_Call(np.matmul, coefficients[left], basis, target.view(float)))
            elif code == "reciprocal":
                program.append(_Call(_reciprocal, work[left], target, None))
            else:
                x, y = (1.0 if k < 0 else work[k] for k in (left, right))
                program.append(_Call(_UFUNCS[code], x, y, target))
        return program, loads


class _Call(NamedTuple):
    function: Callable[..., object]
    left: Any
    right: Any
    out: Any


def _reciprocal(x: Complex, out: Complex, _: None) -> None:
    np.reciprocal(x, out)


_UFUNCS: dict[str, Callable[..., object]] = {
    "multiply": np.multiply,
    "add": np.add,
    "subtract": np.subtract,
    "divide": np.divide,
}


def _operands(step: _Step) -> list[int]:
    """Values a step reads, in order, without the number 1."""
    if step.code == "load":
        return []
    return [v for v in (step.left, step.right) if v is not None]


def _order(steps: list[_Step], results: list[Signed]) -> list[int]:
    """Steps the results need, every load moved to just before its first use."""
    needed = {r.value for r in results if r.value is not None}
    for k in range(len(steps) - 1, -1, -1):
        if k in needed:
            needed.update(_operands(steps[k]))
    order: dict[int, None] = {}
    for k in sorted(needed):
        if steps[k].code != "load":
            order.update((v, None) for v in _operands(steps[k]) if steps[v].code == "load")
            order[k] = None
    order.update((r.value, None) for r in results if r.value is not None)
    return list(order)


def _with_buffers(steps: list[_Step], results: list[Signed]) -> Tape:
    """Drop dead steps and give every value a buffer, taken back after its last use."""
    order = _order(steps, results)
    last = {v: position for position, k in enumerate(order) for v in _operands(steps[k])}
    last |= {r.value: len(order) for r in results if r.value is not None}
    free: list[int] = []
    where: dict[int, int] = {}
    count = 0
    made: list[tuple[str, int, int, int]] = []
    for position, k in enumerate(order):
        step = steps[k]
        if step.code == "load":
            left, right = step.left, None
        else:
            left, right = (None if v is None else where[v] for v in (step.left, step.right))
            free += [where[v] for v in set(_operands(step)) if last[v] == position]
        if not free:
            free.append(count)
            count += 1
        where[k] = free.pop()
        made.append(
            (step.code, where[k], -1 if left is None else left, -1 if right is None else right)
        )
    placed = (Signed(r.sign, None if r.value is None else where[r.value]) for r in results)
    return Tape(tuple(made), count, tuple(placed))
