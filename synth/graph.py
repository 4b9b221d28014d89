"""Block graphs: named integrators and adders joined by weighted terms.

The signal of an integrator obeys dv/dt = sum of weight * source, weights in 1/s; that of an
adder is v = sum of weight * source, weights plain ratios.  A source is ``"in"`` or the name
of a block.  Signs are those of the mathematics; polarity is a later stage.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.errors import GraphError

__all__ = ["INPUT", "Block", "BlockGraph", "Term", "merged_terms"]

INPUT = "in"
Weight = Fraction | float
_Complex = NDArray[np.complex128]
_NAME = re.compile(r"[a-z][a-z0-9]{0,15}")
_RESERVED = frozenset({"in", "out", "src"})


@dataclass(frozen=True)
class Term:
    """One weighted input of a block.

    Parameters
    ----------
    source
        ``"in"`` or the name of a block.
    weight
        1/s into an integrator, a plain ratio into an adder; not zero.
    sets
        What the weight stands for, in words a reader of the parts list understands.
    """

    source: str
    weight: Fraction | float
    sets: str = ""


@dataclass(frozen=True)
class Block:
    """An integrator or an adder with its terms.

    An adder with `both_signs` has a cell that takes terms of either sign, at either input of its
    op-amp; nothing it reads need be inverted for it.
    """

    name: str
    kind: str
    terms: tuple[Term, ...]
    both_signs: bool = False

    def __post_init__(self) -> None:
        if not _NAME.fullmatch(self.name) or self.name in _RESERVED:
            raise GraphError(f"got the block name {self.name!r}, expected letters and digits")
        if self.kind not in ("integrator", "adder"):
            raise GraphError(f"block {self.name}: got kind {self.kind!r}")
        if self.both_signs and self.kind != "adder":
            raise GraphError(f"block {self.name}: got an {self.kind} with terms of both signs")
        if not self.terms:
            raise GraphError(f"block {self.name} has no input")
        sources = [t.source for t in self.terms]
        if len(set(sources)) != len(sources):
            raise GraphError(f"block {self.name} takes one source twice: {sources}")
        if any(t.weight == 0 for t in self.terms):
            raise GraphError(f"block {self.name} has a term of weight zero")

    @property
    def is_integrator(self) -> bool:
        """Whether the block integrates."""
        return self.kind == "integrator"


@dataclass(frozen=True)
class BlockGraph:
    """A network of blocks between ``in`` and the block named `output`.

    Attributes
    ----------
    form
        Name of the realization.
    blocks
        In signal-flow order where there is one.
    output
        The block whose signal is the output.

    Raises
    ------
    GraphError
        A name used twice, an unknown source or output, or adders in a loop.
    """

    form: str
    blocks: tuple[Block, ...]
    output: str

    def __post_init__(self) -> None:
        names = [b.name for b in self.blocks]
        if len(set(names)) != len(names):
            raise GraphError(f"a block name is used twice among {names}")
        known = {INPUT, *names}
        for block in self.blocks:
            for term in block.terms:
                if term.source not in known:
                    raise GraphError(f"block {block.name}: unknown source {term.source!r}")
        if self.output not in names:
            raise GraphError(f"unknown output {self.output!r}")
        _ = self.adder_order

    @cached_property
    def by_name(self) -> dict[str, Block]:
        """Blocks by name."""
        return {b.name: b for b in self.blocks}

    @property
    def integrators(self) -> tuple[Block, ...]:
        """The integrators in order."""
        return tuple(b for b in self.blocks if b.is_integrator)

    @property
    def adders(self) -> tuple[Block, ...]:
        """The adders in order."""
        return tuple(b for b in self.blocks if not b.is_integrator)

    @cached_property
    def adder_order(self) -> tuple[str, ...]:
        """Adders so that each comes after the adders it reads."""
        waiting = {b.name: {t.source for t in b.terms} for b in self.adders}
        order: list[str] = []
        while waiting:
            ready = [n for n, sources in waiting.items() if not sources & waiting.keys()]
            if not ready:
                raise GraphError(f"the adders {sorted(waiting)} feed each other in a loop")
            order += ready
            for name in ready:
                del waiting[name]
        return tuple(order)

    def readers(self, source: str) -> tuple[tuple[Block, Term], ...]:
        """Every block and term that reads `source`."""
        return tuple((b, t) for b in self.blocks for t in b.terms if t.source == source)

    def signal_rows(self) -> dict[str, list[Weight]]:
        """Every signal as a weighted sum of the integrators in order and, last, the input.

        Adders are substituted.  Exact when every weight is a rational.
        """
        columns = [*(b.name for b in self.integrators), INPUT]
        rows: dict[str, list[Weight]] = {
            name: [Fraction(int(c == name)) for c in columns] for name in columns
        }
        for name in self.adder_order:
            rows[name] = _combined(self.by_name[name], rows)
        return rows

    def state_matrices(self) -> tuple[list[list[Weight]], list[Weight], list[Weight], Weight]:
        """A, B, C, D of dx/dt = A x + B u, y = C x + D u; x are the integrators in order.

        Exact when every weight is a rational.
        """
        rows = self.signal_rows()
        derivatives = [_combined(b, rows) for b in self.integrators]
        y = rows[self.output]
        return [d[:-1] for d in derivatives], [d[-1] for d in derivatives], y[:-1], y[-1]

    def signals(self, s: ArrayLike) -> dict[str, NDArray[np.complex128]]:
        """Transfer function from the input to every block at complex frequencies [rad/s].

        Computed on the sparse equations of integrators and adders together, so zeros made by
        the structure come out as zeros.  Returns arrays of the shape of `s`.
        """
        points = np.asarray(s, dtype=complex)
        matrix, right = self._equations(points.ravel())
        solved = _solve_scaled(matrix, right)
        return {b.name: solved[:, k].reshape(points.shape) for k, b in enumerate(self.blocks)}

    def _equations(self, s: NDArray[np.complex128]) -> tuple[_Complex, _Complex]:
        """Matrix (points, n, n) and right-hand side (points, n) of the signals at `s`."""
        index = {b.name: k for k, b in enumerate(self.blocks)}
        n = len(index)
        matrix = np.zeros((s.size, n, n), dtype=complex)
        right = np.zeros((s.size, n), dtype=complex)
        for row, block in enumerate(self.blocks):
            matrix[:, row, row] += s if block.is_integrator else 1.0
            for term in block.terms:
                if term.source == INPUT:
                    right[:, row] += float(term.weight)
                else:
                    matrix[:, row, index[term.source]] -= float(term.weight)
        return matrix, right

    def injections(self, s: ArrayLike) -> dict[str, NDArray[np.complex128]]:
        """Transfer function to the output from a disturbance added to each block's signal.

        By the adjoint: one transposed solve for all blocks.  Arrays of the shape of `s`.
        """
        points = np.asarray(s, dtype=complex)
        matrix, right = self._equations(points.ravel())
        unit = np.zeros_like(right)
        unit[:, [b.name for b in self.blocks].index(self.output)] = 1.0
        adjoint = _solve_scaled(np.swapaxes(matrix, 1, 2), unit)
        return {
            b.name: (adjoint[:, k] * (points.ravel() if b.is_integrator else 1.0)).reshape(
                points.shape
            )
            for k, b in enumerate(self.blocks)
        }

    def at(self, s: ArrayLike) -> NDArray[np.complex128]:
        """Transfer function from input to output at complex frequencies [rad/s]."""
        return self.signals(s)[self.output]

    def rescaled(self, levels: Mapping[str, Weight]) -> BlockGraph:
        """The same graph with signal b multiplied by ``levels[b]`` (1 where not named).

        A term from j to i then has weight * level_i / level_j.  The input stays as it is, and
        the output too if its level is 1.
        """
        one = Fraction(1)
        blocks = tuple(
            replace(
                b,
                terms=tuple(
                    replace(
                        t,
                        weight=t.weight * levels.get(b.name, one) / levels.get(t.source, one),
                    )
                    for t in b.terms
                ),
            )
            for b in self.blocks
        )
        return replace(self, blocks=blocks)


def _combined(block: Block, rows: Mapping[str, list[Weight]]) -> list[Weight]:
    """The weighted sum of the rows a block reads."""
    out: list[Weight] = [Fraction(0)] * len(rows[block.terms[0].source])
    for term in block.terms:
        for k, value in enumerate(rows[term.source]):
            if value:
                out[k] = out[k] + term.weight * value
    return out


def _solve_scaled(matrix: _Complex, right: _Complex) -> _Complex:
    """Solve (points, n, n) x = (points, n) so that small signals are as accurate as large ones.

    Columns are scaled by the size of the solution found so far and rows to a largest element
    of one, until the solution stands still; elimination then loses nothing to a signal that
    is small because the structure makes it so.
    """
    size = np.ones(right.shape)
    found = right
    for _ in range(8):
        scaled = matrix * size[:, None, :]
        rows = 1 / np.max(np.abs(scaled), axis=2, keepdims=True)
        step = np.linalg.solve(scaled * rows, right[:, :, None] * rows)[:, :, 0] * size
        change = np.max(np.abs(step - found) / np.maximum(np.abs(step), 1e-280))
        found = np.asarray(step, dtype=np.complex128)
        if change < 1e-13:
            break
        largest = np.max(np.abs(found), axis=1, keepdims=True)
        size = np.maximum(np.abs(found), 1e-250 * largest + 1e-280)
    return found


def merged_terms(terms: Iterable[Term]) -> tuple[Term, ...]:
    """Terms with those of one source added up and those of weight zero left out."""
    out: dict[str, Term] = {}
    for term in terms:
        have = out.get(term.source)
        out[term.source] = term if have is None else replace(have, weight=have.weight + term.weight)
    return tuple(t for t in out.values() if t.weight != 0)
