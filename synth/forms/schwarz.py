"""The orthonormal ladder: integrators coupled to their neighbours only, damped at one end.

Johns, Snelgrove and Sedra, "Orthonormal ladder filters", 1989 (from memory); the matrix of a
low-pass is the Schwarz form.  The even and the odd part of the denominator, P_0 and P_1 in
one order or the other, are taken apart by a continued fraction in exact rationals (Routh's
array, with quotients in 1/s where H(s) has zeros at the origin)::

    D = P_0 + P_1,   P_{j+1} = P_{j-1} - (c_j s + d_j / s) P_j,   c_j or d_j may be absent

Read as signals x_j = (P_j / D) u these are the branches of a lossless ladder fed through one
resistor; w_j is what the part d_j stores::

    c_j x_j' = x_{j-1} - x_{j+1} - w_j,   w_j' = d_j x_j,   x_0 = u - x_1

A low-pass has n branches with a c_j alone: a tridiagonal chain.  Whatever the branches, the
states scaled by the energy they store are orthonormal, their Gramian is the identity times a
constant; here the scaling of levels comes later.

**Both ends from the structure.**  Every c_j lowers the degree of the numerators after it by
one, every d_j adds a zero at the origin.  With m zeros at the origin and r at infinity the
ladder has m parts d where m <= r, otherwise r parts c, those of both kinds in one branch
first; the output is then a sum of signals all of which have these zeros.  One of powers in a
row, such as a band-pass s^m or a low-pass, is a single signal.  Branches with a d_j alone
have no state of their own: their x_j are adders, solved for from both ends of the row.

**Poles on the imaginary axis**, at the origin too, end the fraction early; as in Routh's test
a derivative takes the place of what has vanished, behind a coupling of zero.  Poles in the
right half-plane make quotients negative, or one of them zero: then there is no such form.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

from synth.errors import RealizationError
from synth.forms.common import ascending, with_output
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.transfer import TransferFunction

__all__ = ["Branch", "ladder", "schwarz"]

_ZERO, _ONE = Fraction(0), Fraction(1)
_Row = list[Fraction]


@dataclass(frozen=True, kw_only=True)
class Branch:
    """One branch of the ladder.

    Parameters
    ----------
    c, d
        The quotients in s and in 1/s, 0 where absent.
    row
        P_j, ascending, length n + 1.
    lowest, highest
        The powers of s within which `row` lies by structure.
    coupled
        Whether the next branch acts back on this one.
    """

    c: Fraction
    d: Fraction
    row: Sequence[Fraction]
    lowest: int
    highest: int
    coupled: bool


def schwarz(target: TransferFunction) -> BlockGraph:
    """The orthonormal ladder of a proper H(s), weights exact.

    Raises
    ------
    RealizationError
        Poles in the right half-plane for which a quotient is zero.
    """
    b, a = ascending(target)
    n = target.order
    low = target.zeros_at_origin if a[0] else 0
    rising = low > target.relative_degree or (
        low == target.relative_degree and low > 0 and n % 2 == 1
    )
    parts = n - target.relative_degree if rising else low
    branches, damped = ladder(a, parts=parts, rising=rising)
    wiring = _Wiring(branches, damped)
    blocks = wiring.blocks()
    taps = [wiring.known(tap) for tap in _taps(b, branches, low, rising)]
    if taps[0].source == "e":
        blocks = _with_rate(blocks)
        if blocks[0].name != "e":
            taps[0] = Term(INPUT, taps[0].weight, "c0, input to output")
    return with_output("schwarz", _folded(blocks, taps), taps, "y")


def ladder(a: Sequence[Fraction], *, parts: int, rising: bool) -> tuple[list[Branch], bool]:
    """The branches, and whether the resistor at the input damps the first.

    Parameters
    ----------
    a
        a_0 ... a_n of the denominator, a_n = 1.
    parts
        How many parts d; there are n - `parts` parts c.
    rising
        Whether parts d are the majority: P_0 is then the even part, otherwise the one of
        the highest power.

    Raises
    ------
    RealizationError
        A quotient of zero.
    """
    n = len(a) - 1
    parity = 0 if rising else n % 2
    before: _Row = [c if k % 2 == parity else _ZERO for k, c in enumerate(a)]
    row: _Row = [c - e for c, e in zip(a, before, strict=True)]
    span_before = (parity, n - (n - parity) % 2)
    span = (1 - parity, n - (n - 1 + parity) % 2)
    damped = any(row)
    row = row if damped else _derivative(before)
    left_c, left_d = n - parts, parts
    branches: list[Branch] = []
    while left_c or left_d:
        takes_c = left_c > 0 and span_before[1] == span[1] + 1
        takes_d = left_d > 0 and span_before[0] == span[0] - 1
        c = _quotient(before, row, span_before[1], span[1]) if takes_c else _ZERO
        d = _quotient(before, row, span_before[0], span[0]) if takes_d else _ZERO
        after = [
            p - (c * row[k - 1] if k else 0) - (d * row[k + 1] if k < n else 0)
            for k, p in enumerate(before)
        ]
        left_c, left_d = left_c - takes_c, left_d - takes_d
        coupled = any(after)
        branches.append(Branch(c=c, d=d, row=row, lowest=span[0], highest=span[1], coupled=coupled))
        span_before, span = span, (span_before[0] + 2 * takes_d, span_before[1] - 2 * takes_c)
        before, row = row, after if coupled else _derivative(row)
    return branches, damped


def _quotient(before: _Row, row: _Row, power_before: int, power: int) -> Fraction:
    """The coefficient that removes one end of `before`."""
    if not before[power_before] or not row[power]:
        raise RealizationError(
            "board.form: poles in the right half-plane make a quotient of the schwarz ladder "
            "zero; expected poles in the left half-plane or on the imaginary axis, or another form"
        )
    return before[power_before] / row[power]


def _derivative(row: _Row) -> _Row:
    """What takes the place of a vanished row: s^k Q'(s) of the row s^k Q(s), Q(0) not zero, or
    the derivative where Q is a constant."""
    lowest = next(k for k, c in enumerate(row) if c)
    if not any(row[lowest + 1 :]):
        return [*(c * k for k, c in enumerate(row) if k), _ZERO]
    return [*(c * max(k - lowest, 0) for k, c in enumerate(row) if k), _ZERO]


def _taps(b: Sequence[Fraction], branches: Sequence[Branch], low: int, rising: bool) -> list[Term]:
    """The output as a sum of signals within the powers that the numerator has.

    Powers are removed from one end, the lowest first where `rising`.  The rate of the first
    branch stands for a highest power n.
    """
    n = len(b) - 1
    high = max(k for k, c in enumerate(b) if c)
    signals: list[tuple[str, int, int, list[Fraction]]] = []
    for j, branch in enumerate(branches, start=1):
        row = list(branch.row)
        signals.append((f"x{j}", branch.lowest, branch.highest, row))
        if branch.d:
            stored = [branch.d * c for c in row[1:]] + [_ZERO]
            signals.append((f"w{j}", branch.lowest - 1, branch.highest - 1, stored))
    if not rising:
        rate = [_ZERO, *(branches[0].c * c for c in branches[0].row[:-1])]
        signals.append(("e", branches[0].lowest + 1, n, rate))
    left = list(b)
    taps: list[Term] = []
    for power in range(low, high + 1) if rising else range(high, low - 1, -1):
        if not left[power]:
            continue
        name, _, _, row = next(
            s for s in signals if s[2 - rising] == power and s[1] >= low and s[2] <= high
        )
        weight = left[power] / row[power]
        left = [c - weight * r for c, r in zip(left, row, strict=True)]
        taps.append(Term(name, weight, f"c{len(taps) + 1}, {name} to output"))
    return taps


@dataclass(frozen=True)
class _Wiring:
    """The branches as blocks."""

    branches: Sequence[Branch]
    damped: bool

    @cached_property
    def sums(self) -> dict[str, tuple[Term, ...]]:
        """What each x_j, or its rate where it has a part c, is the sum of."""
        return {
            f"x{j}": self._integrand(j) if branch.c else self._algebraic(j)
            for j, branch in enumerate(self.branches, start=1)
        }

    @cached_property
    def same(self) -> dict[str, str]:
        """The w_k by the x_j that equals it."""
        return {
            name: terms[0].source
            for branch, (name, terms) in zip(self.branches, self.sums.items(), strict=True)
            if not branch.c and len(terms) == 1
        }

    def known(self, term: Term) -> Term:
        """The term, reading the block that has its signal."""
        name = self.same.get(term.source)
        if name is None:
            return term
        return Term(name, term.weight, term.sets.replace(f"{term.source} ", f"{name} "))

    def blocks(self) -> list[Block]:
        """x_j and w_j in order, but what reads the input first; an x_j that equals a w_k is left
        out."""
        blocks: list[Block] = []
        for j, branch in enumerate(self.branches, start=1):
            name = f"x{j}"
            if name not in self.same:
                kind = "integrator" if branch.c else "adder"
                blocks.append(Block(name, kind, tuple(map(self.known, self.sums[name]))))
            if branch.d:
                stored = self.known(Term(name, branch.d, f"d{j}, {name} into w{j}"))
                blocks.append(Block(f"w{j}", "integrator", (stored,)))
        return sorted(blocks, key=lambda block: all(t.source != INPUT for t in block.terms))

    def _integrand(self, j: int) -> tuple[Term, ...]:
        """x_j' of a branch with a part c: (x_{j-1} - x_{j+1} - w_j) / c_j."""
        branch = self.branches[j - 1]
        terms = [*self._before(j, f"x{j}"), *self._after(j, f"x{j}", -_ONE)]
        if branch.d:
            terms.append(Term(f"w{j}", -_ONE, f"w{j} into x{j}"))
        return tuple(Term(t.source, t.weight / branch.c, f"c{j}, {t.sets}") for t in terms)

    def _algebraic(self, j: int) -> tuple[Term, ...]:
        """x_j of a branch with a part d alone, from the balance of a neighbour like it.

        Counted from the far end, the first, third ... branch give the x_j before them, the
        others the x_j after them.  Of an odd order the first branch stands alone.
        """
        name = f"x{j}"
        if j == 1 and self.order % 2:
            store = Term("w1", -_ONE, "w1 into x1")
            return (Term(INPUT, _ONE, "input gain"), *self._after(1, name, -_ONE), store)
        if (len(self.branches) - j) % 2:
            store = Term(f"w{j + 1}", _ONE, f"w{j + 1} into x{j}")
            return (store, *self._after(j + 1, name, _ONE))
        if not self.branches[j - 2].coupled:
            raise RealizationError(
                "board.form: the schwarz ladder has a coupling of zero to divide by; "
                "expected another form"
            )
        store = Term(f"w{j - 1}", -_ONE, f"w{j - 1} into x{j}")
        return (*self._before(j - 1, name), store)

    def _before(self, j: int, reader: str) -> list[Term]:
        """x_{j-1} as a sum read by `reader`; x_0 = u - x_1."""
        if j > 1:
            return [Term(f"x{j - 1}", _ONE, f"x{j - 1} into {reader}")]
        damping = [Term("x1", -_ONE, f"damping, x1 into {reader}")] if self.damped else []
        return [Term(INPUT, _ONE, f"input into {reader}"), *damping]

    def _after(self, j: int, reader: str, sign: Fraction) -> list[Term]:
        """x_{j+1} as far as it acts back on branch j."""
        if not self.branches[j - 1].coupled or j == len(self.branches):
            return []
        return [Term(f"x{j + 1}", sign, f"x{j + 1} into {reader}")]

    @property
    def order(self) -> int:
        """Parts of all branches together."""
        return sum(bool(b.c) + bool(b.d) for b in self.branches)


def _with_rate(blocks: Sequence[Block]) -> list[Block]:
    """The blocks with the sum into the first integrator made an adder ``e``, unless it is the
    input alone."""
    first = blocks[0]
    gain = first.terms[0].weight
    if len(first.terms) == 1:
        return list(blocks)
    terms = tuple(Term(t.source, t.weight / gain, t.sets) for t in first.terms)
    reader = (Term("e", gain, "c1, e into x1"),)
    return [Block("e", "adder", terms), Block(first.name, "integrator", reader), *blocks[1:]]


def _folded(blocks: Sequence[Block], taps: Iterable[Term]) -> list[Block]:
    """The blocks without adders that only one integrator reads, and nothing else."""
    tapped = {t.source for t in taps}
    sums = {b.name: b.terms for b in blocks if not b.is_integrator and b.name not in tapped}
    readers = Counter(t.source for b in blocks for t in b.terms)
    merged: list[Block] = []
    gone: set[str] = set()
    for block in blocks:
        (first, *others) = block.terms
        inner = sums.get(first.source, ())
        if inner and not others and block.is_integrator and readers[first.source] == 1:
            gone.add(first.source)
            terms = tuple(Term(t.source, t.weight * first.weight, t.sets) for t in inner)
            merged.append(Block(block.name, block.kind, terms))
        else:
            merged.append(block)
    return [b for b in merged if b.name not in gone]
