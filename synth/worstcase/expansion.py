"""How ln H moves about one board when every part may move at once, exactly.

The variables are admittances: G of a resistor, C of a capacitor.  Each stands in the nodal matrix
M as a term of rank one, y u w^T, so with the relative deviations delta of all parts from a board
and Delta = diag(delta)

    H(delta)/H(0) = det(I + Y Delta) / det(I + X Delta),

    X = W^T M^-1 U diag(y),    Y = X - beta alpha^T / H(0),

beta the voltages across the parts and alpha what H answers to a current through each: numerator
and denominator are multi-affine in the parts (matrix determinant lemma).  The series

    ln det(I + X Delta) = sum over n of (-1)^(n+1)/n trace((X Delta)^n)

then gives every derivative of ln H: the first is diag(Y - X), the adjoint sensitivities of
`synth.nodal.sensitivity`; the second -(Y * Y^T - X * X^T), products entry by entry.  Along one
part alone, ln H = ln(1 + Y_kk delta) - ln(1 + X_kk delta), without a remainder.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.circuit import Circuit
from synth.errors import CircuitError
from synth.nodal import dense
from synth.nodal.structure import Structure, structure_of

__all__ = ["Expansion", "Parts"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class Expansion:
    """H at some samples (a board and a frequency each) and its behaviour about them.

    Parameters
    ----------
    response
        H, shape (N,).
    denominator, numerator
        X and Y of the module, per relative deviation, shape (N, V, V).
    """

    response: Complex
    denominator: Complex
    numerator: Complex


@dataclass(frozen=True, eq=False)
class Parts:
    """What may vary in a circuit, as multiples of nominal admittances, V of them.

    A variable is a part with a tolerance, or two whose currents alone meet in a net that no
    op-amp drives, each coming from a net that is driven: H hangs on the ratio of their
    admittances alone, so the first stands for both.

    Parameters
    ----------
    structure
        Of the circuit.
    active
        Column of the part of each variable, shape (V,).
    partner
        Column of the other part, or -1, shape (V,).
    ranges
        Smallest and largest multiple of the nominal value of every passive, shape (2, P).
    """

    structure: Structure
    active: Index
    partner: Index
    ranges: Real

    @classmethod
    def of(cls, circuit: Circuit, ranges: ArrayLike | None = None) -> Parts:
        """Those of a circuit, within `ranges` (2, P) or its tolerances.

        Raises
        ------
        CircuitError
            Ranges of another shape, or not from above 0 to 1 and from 1.
        """
        tolerance = np.array([p.tolerance for p in circuit.passives], dtype=float)
        found = np.array([1 - tolerance, 1 + tolerance])
        if ranges is not None:
            found = np.asarray(ranges, dtype=float)
            if found.shape != (2, tolerance.size) or np.any((found[0] <= 0) | (found[0] > 1)):
                raise CircuitError(
                    f"got ranges of shape {found.shape}, expected the smallest and the largest "
                    f"multiple of {tolerance.size} values, around 1"
                )
        spread = found[1] - found[0]
        structure = structure_of(circuit)
        varied = [int(k) for k in np.flatnonzero(spread > 0)]
        partner = _partners(structure, varied)
        taken = set(partner.values())
        active = [k for k in varied if k not in taken]
        return cls(
            structure,
            np.array(active, dtype=np.intp),
            np.array([partner.get(k, -1) for k in active], dtype=np.intp),
            found,
        )

    @property
    def varied(self) -> Index:
        """Columns of all parts with a tolerance."""
        return np.flatnonzero(self.ranges[1] > self.ranges[0])

    @property
    def box(self) -> tuple[Real, Real]:
        """Smallest and largest multiple of each variable, shapes (V,)."""
        low, high = self._ends(self.active)
        other_low, other_high = self._ends(self.partner)
        return low / other_high, high / other_low

    def values(self, multiples: Real) -> Real:
        """Values of all passives [ohm], [F], shape (..., P), of multiples (..., V); two parts
        that vary as one share the way between their ends."""
        own = self.structure
        found = np.broadcast_to(own.values, (*multiples.shape[:-1], own.values.size)).copy()
        low, high = self.box
        share = np.clip(np.log(multiples / low) / np.log(high / low), 0.0, 1.0)
        one = self.partner < 0
        for columns, way in ((self.active, share), (self.partner, 1 - share)):
            kept = columns >= 0
            least, most = self._ends(columns)
            factor = least * (most / least) ** way
            factor = np.where(one, multiples, factor) if columns is self.active else factor
            factor = np.where(own.is_resistor[columns], 1 / factor, factor)
            found[..., columns[kept]] *= factor[..., kept]
        return found

    def _ends(self, columns: Index) -> tuple[Real, Real]:
        """Smallest and largest multiple of the admittances of some parts, 1 for none."""
        low, high = np.where(columns < 0, 1.0, self.ranges[:, columns])
        inverted = self.structure.is_resistor[columns]
        return np.where(inverted, 1 / high, low), np.where(inverted, 1 / low, high)

    def response(self, s: Complex, multiples: Real) -> Complex:
        """H of N boards, each at its own `s` (N,) [rad/s], `multiples` (N, V); shape (N,)."""
        own = self.structure
        y = dense.admittances(own, s, self.values(multiples))
        a = dense.inverse_gains(s, own.gain_bandwidth, own.open_loop_gain)
        return dense.solve_samples(own, y, a)[:, own.output]

    @property
    def others(self) -> Index:
        """Columns of the capacitors that are no variable, shape (O,)."""
        return np.setdiff1d(np.flatnonzero(~self.structure.is_resistor), self.active)

    @property
    def with_frequency(self) -> NDArray[np.bool_]:
        """Which variables grow in proportion to frequency where `expand` appends those that only
        frequency moves, shape (V + O + U,)."""
        extra = np.ones(self.others.size + len(self.structure.driver), dtype=bool)
        return np.append(~self.structure.is_resistor[self.active], extra)

    def expand(self, s: Complex, multiples: Real, *, frequency: bool = False) -> Expansion:
        """About N boards, each at its own `s` (N,) [rad/s], `multiples` (N, V).

        With `frequency`, the capacitors that are no variable and s / (2 pi GBW) of every op-amp
        are appended to the variables, O and U of them.

        Raises
        ------
        NumericalError
            The equations are singular at a sample.
        """
        own, count = self.structure, s.size
        n = own.size
        columns = np.append(self.active, self.others) if frequency else self.active
        driven = np.array(list(own.driver) if frequency else [], dtype=np.intp)
        passives = columns.size
        parts = passives + driven.size
        y = dense.admittances(own, s, np.broadcast_to(own.values, (count, own.values.size))).copy()
        y[:, self.active] *= multiples
        a = dense.inverse_gains(s, own.gain_bandwidth, own.open_loop_gain)
        matrix = dense.equations(own, y, a)
        right = np.empty((count, n, parts + 1), dtype=complex)
        right[:, :, :passives] = self._columns(columns) * y[:, None, columns]
        right[:, :, passives:] = 0.0
        which = [own.driver[int(net)] for net in driven]
        gains = s[:, None] / (2 * np.pi * own.gain_bandwidth[which])
        right[:, driven, passives + np.arange(driven.size)] = -gains
        right[:, :, parts] = -matrix[:, :, n]
        solved = np.zeros((count, n + 2, parts + 1), dtype=complex)
        solved[:, :n] = dense.solve_rows(matrix[:, :, :n], right)
        # The input holds 1 V whatever the parts are; ground stays 0.
        solved[:, n, parts] = 1.0
        p, q = own.ends[columns, 0], own.ends[columns, 1]
        across = np.concatenate([solved[:, p] - solved[:, q], solved[:, driven]], axis=1)
        x, beta = across[:, :, :parts], across[:, :, parts]
        alpha, response = solved[:, own.output, :parts], solved[:, own.output, parts]
        with np.errstate(divide="ignore", invalid="ignore"):
            numerator = x - beta[:, :, None] * (alpha / response[:, None])[:, None, :]
        return Expansion(response, x, np.asarray(numerator, dtype=np.complex128))

    def _columns(self, parts: Index) -> Real:
        """u of some parts on the rows of Kirchhoff's current law, shape (n, parts)."""
        own = self.structure
        columns = np.zeros((own.size + 2, parts.size))
        ends, each = own.ends[parts], np.arange(parts.size)
        np.add.at(columns, (ends[:, 0], each), 1.0)
        np.add.at(columns, (ends[:, 1], each), -1.0)
        columns[list(own.driver)] = 0.0
        return columns[: own.size]


def _partners(structure: Structure, varied: list[int]) -> dict[int, int]:
    """Parts that vary as one: the first of two to the second."""
    driven = {structure.size, structure.size + 1, *structure.driver}
    ends = [(int(p), int(q)) for p, q in structure.ends]
    found: dict[int, int] = {}
    for net in range(structure.size):
        on_net = [k for k, pair in enumerate(ends) if net in pair]
        others = [sum(ends[k]) - net for k in on_net]
        alone = len(on_net) == 2 and net not in driven and driven.issuperset(others)
        if alone and set(varied).issuperset(on_net):
            found[on_net[0]] = on_net[1]
    return found
