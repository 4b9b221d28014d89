"""Boards as arrays, and the region around the nominal board where a plan is measured."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.nodal import dense
from synth.nodal.structure import Structure

__all__ = ["TRUSTED_RATIO", "Boards", "Region"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

TRUSTED_RATIO = 4.0
"""A plan is measured with parts and op-amps up to this factor from nominal, and trusted there."""


@dataclass(frozen=True, eq=False)
class Boards:
    """Values of parts and figures of op-amps, board by board.

    `values` (boards, P) [ohm], [F]; `gain_bandwidth` [Hz] and `open_loop_gain` (boards, U).
    """

    values: Real
    gain_bandwidth: Real
    open_loop_gain: Real

    @property
    def count(self) -> int:
        """Number of boards."""
        return int(self.values.shape[0])

    def part(self, start: int, stop: int) -> Boards:
        """Boards start to stop - 1."""
        return Boards(
            self.values[start:stop],
            self.gain_bandwidth[start:stop],
            self.open_loop_gain[start:stop],
        )

    def samples(
        self, structure: Structure, s: Complex, board: NDArray[np.intp], point: NDArray[np.intp]
    ) -> tuple[Complex, Complex]:
        """y and a of `synth.nodal.dense` for pairs of board and frequency index."""
        y = dense.admittances(structure, s[point], self.values[board])
        a = dense.inverse_gains(s[point], self.gain_bandwidth[board], self.open_loop_gain[board])
        return y, a


@dataclass(frozen=True, eq=False)
class Region:
    """Parts and op-amps up to `TRUSTED_RATIO` from nominal, at angular frequencies from `low` to
    `high` [rad/s]."""

    structure: Structure
    low: float
    high: float

    @classmethod
    def of(cls, structure: Structure) -> Region:
        """The region whose frequencies hold every corner, with two decades to spare."""
        resistances = structure.values[structure.is_resistor]
        capacitances = structure.values[~structure.is_resistor]
        corners = [2 * np.pi * structure.gain_bandwidth]
        corners.append(corners[0] / structure.open_loop_gain)
        if resistances.size and capacitances.size:
            corners.append(1.0 / np.multiply.outer(resistances, capacitances).ravel())
        found = np.concatenate(corners)
        if not found.size:
            return cls(structure, 1.0, 1e9)
        return cls(structure, float(found.min()) / 100, float(found.max()) * 100)

    def holds(self, boards: Boards, s: Complex) -> bool:
        """Whether all boards and frequencies lie in the region."""
        size = np.abs(s)
        if size.min() < self.low or size.max() > self.high:
            return False
        own = self.structure
        pairs = (
            (boards.values, own.values),
            (boards.gain_bandwidth, own.gain_bandwidth),
            (boards.open_loop_gain, own.open_loop_gain),
        )
        return all(
            bool(np.all(given <= nominal * TRUSTED_RATIO))
            and bool(np.all(given * TRUSTED_RATIO >= nominal))
            for given, nominal in pairs
        )

    def frequencies(self, count: int = 20) -> Complex:
        """s across the region, shape (count,) [rad/s]."""
        return np.asarray(1j * np.geomspace(self.low, self.high, count), dtype=np.complex128)

    def boards(self, count: int = 4) -> Boards:
        """The nominal board and others all over the region, always the same ones."""
        generator = np.random.default_rng(20)

        def around(nominal: Real) -> Real:
            exponent = generator.uniform(-1, 1, (count, nominal.size))
            exponent[0] = 0.0
            return np.asarray(nominal * TRUSTED_RATIO**exponent)

        own = self.structure
        return Boards(around(own.values), around(own.gain_bandwidth), around(own.open_loop_gain))
