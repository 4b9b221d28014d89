"""Rules for buying parts, and the figures of op-amps.

Resistances in ohm, capacitances in farad, everything else in the SI unit named.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.errors import JobError
from synth.preferred import decade, nearest, series_values
from synth.quantities import show

__all__ = ["OP_AMPS_PER_PACKAGE", "OpAmp", "PartRule", "StockItem", "VendorModel"]

OP_AMPS_PER_PACKAGE = 4
"""Of the largest package; those of a board fill packages in order of their references."""


@dataclass(frozen=True, kw_only=True)
class StockItem:
    """One line of a drawer: a value [ohm] or [F], its relative tolerance, and how many there
    are (None: enough)."""

    value: float
    tolerance: float
    count: int | None = None

    def __post_init__(self) -> None:
        if not 0 < self.value < math.inf:
            raise JobError(f"got the value {self.value}, expected a positive number")
        if not 0 <= self.tolerance < 1:
            raise JobError(f"got a tolerance of {self.tolerance}, expected 0 to below 100 %")
        if self.count is not None and self.count < 1:
            raise JobError(f"got a count of {self.count}, expected 1 or more")


@dataclass(frozen=True, kw_only=True)
class PartRule:
    """Which values of one kind of part may be bought.

    Parameters
    ----------
    kind
        ``"resistor"`` or ``"capacitor"``.
    series
        Name of an IEC 60063 series, ``"E3"`` to ``"E192"``.
    tolerance
        Relative tolerance of a part, a ratio (0.01 is 1 %).
    smallest, largest
        Allowed range of values [ohm] or [F], both ends included.
    stock
        What the drawer holds; when not empty it stands in for the series, and each value has
        the tolerance of its line, the tightest where a value has several.
    without
        Values that cannot be had although the series or the drawer has them.
    """

    kind: str
    series: str
    tolerance: float
    smallest: float
    largest: float
    stock: tuple[StockItem, ...] = ()
    without: tuple[float, ...] = ()

    def __post_init__(self) -> None:
        if self.kind not in ("resistor", "capacitor"):
            raise JobError(f"got kind {self.kind!r}, expected 'resistor' or 'capacitor'")
        if not (math.isfinite(self.tolerance) and 0 <= self.tolerance < 1):
            raise JobError(f"got a tolerance of {self.tolerance}, expected 0 to below 100 %")
        decade(self.series, key="series")
        unit = "ohm" if self.kind == "resistor" else "F"
        if not (0 < self.smallest < self.largest < math.inf):
            raise JobError(
                f"got a range from {self.smallest:g} to {self.largest:g} {unit}, "
                "expected 0 < smallest < largest"
            )
        if self.values.size == 0:
            raise JobError(
                f"got no value of {self.source} from {show(self.smallest, unit)} to "
                f"{show(self.largest, unit)}, expected a wider range"
            )

    @cached_property
    def values(self) -> NDArray[np.float64]:
        """What may be bought, ascending [ohm] or [F]."""
        if not self.stock:
            every = series_values(self.series, self.smallest, self.largest)
        else:
            inside = {i.value for i in self.stock if self.smallest <= i.value <= self.largest}
            every = np.array(sorted(inside))
        return every[~np.isin(every, self.without)]

    @property
    def source(self) -> str:
        """Where values come from: the series' name, or ``"stock"``."""
        return "stock" if self.stock else self.series

    @property
    def ends(self) -> tuple[float, float]:
        """Between which values a part may lie: those of the range, or the outermost ones of the
        stock within it."""
        if not self.stock:
            return self.smallest, self.largest
        return float(self.values[0]), float(self.values[-1])

    def lines_of(self, value: float) -> tuple[StockItem, ...]:
        """The lines of the stock with that value, the tightest first; none without a stock."""
        return self._lines.get(value, ())

    def tolerance_of(self, value: float) -> float:
        """Relative tolerance of a part of that value; for a value the stock does not hold, that
        of the nearest one it does."""
        if not self.stock:
            return self.tolerance
        lines = self.lines_of(value) or self.lines_of(nearest(self.values, value))
        return lines[0].tolerance

    def count_of(self, value: float) -> int | None:
        """How many parts of that value there are; None for enough."""
        counts = [i.count for i in self.lines_of(value)]
        known = [c for c in counts if c is not None]
        return sum(known) if counts and len(known) == len(counts) else None

    @cached_property
    def _lines(self) -> dict[float, tuple[StockItem, ...]]:
        found: dict[float, list[StockItem]] = {}
        for item in sorted(self.stock, key=lambda i: i.tolerance):
            found.setdefault(item.value, []).append(item)
        return {value: tuple(items) for value, items in found.items()}


@dataclass(frozen=True, kw_only=True)
class VendorModel:
    """A SPICE model of an op-amp that the job names, for a second look at the response.

    Parameters
    ----------
    file
        Its name as the job states it.
    subcircuit
        Which subcircuit of it is the op-amp.
    pins
        What its nodes are, in their order: ``plus``, ``minus``, ``vcc``, ``vee``, ``out``.
    cards
        The file without comments, one statement an entry, each of an allowed kind.
    """

    file: str
    subcircuit: str
    pins: tuple[str, ...]
    cards: tuple[str, ...]


@dataclass(frozen=True, kw_only=True)
class OpAmp:
    """Figures of an op-amp: typical values of a class, or what the job states.

    Parameters
    ----------
    kind
        Name of the class the figures start from.
    gain_bandwidth
        Gain-bandwidth product [Hz]: the one-pole gain is
        A(s) = A0 / (1 + s A0 / (2 pi gain_bandwidth)).
    slew_rate
        Largest rate of change of the output [V/s].
    open_loop_gain
        DC gain A0, a plain ratio [V/V].
    offset
        Input offset voltage [V], the magnitude.
    bias_current
        Input bias current [A], the magnitude.
    voltage_noise, current_noise
        White input noise densities [V/rtHz], [A/rtHz].
    swing_headroom
        How close the output gets to either rail [V].
    output_current
        Largest output current [A].
    supply_current
        Quiescent current of one amplifier [A].
    """

    kind: str
    gain_bandwidth: float
    slew_rate: float
    open_loop_gain: float
    offset: float
    bias_current: float
    voltage_noise: float
    current_noise: float
    swing_headroom: float
    output_current: float
    supply_current: float

    def __post_init__(self) -> None:
        for name in ("gain_bandwidth", "slew_rate", "open_loop_gain", "output_current"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0):
                raise JobError(f"got {value}, expected a positive number", key=name)
        for name in (
            "offset",
            "bias_current",
            "voltage_noise",
            "current_noise",
            "swing_headroom",
            "supply_current",
        ):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                raise JobError(f"got {value}, expected zero or a positive number", key=name)
