"""What holds a scan of one loop around many boards: nodes, bounds and the nominal loop.

What a board does to the loop, ln of its response over H(s), is smooth in ln frequency: a few
nodes a decade tell it (`synth.tolerance.panels`).  Where the panels must be narrow is found on
the first boards.  Every board is then checked by the coefficients of its own polynomials.  H(s),
plant and delay are computed exactly wherever they are asked for.

Arrays have the axes (boards, nodes), (boards, panels) or (boards, points of the grid).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.nyquist import LIKE_TARGET, settled_turns
from synth.tolerance.drawing import Drawn
from synth.tolerance.loopsweep import LoopSweep
from synth.tolerance.panels import DEGREE, Panels

__all__ = ["LoopScan"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]
Mask = NDArray[np.bool_]

WIDEST = 240
"""Points of the grid a panel spans at first: of a resonance, 24 half-widths, which 13 nodes do not
overlook."""

BUILT, KEPT = 1e-8, 1e-7
"""Highest coefficients of ln H that panels are made for, and that a board may have."""

MOST_NODES = 700
"""Nodes with which a board takes about as long as on the grid: about those of a Q of 100."""

LOOSEST = 1000.0
"""Where |L| is far from 1 they may be as many times larger, but not more than this: no margin is
read there but that of a gain, which is then right to 1e-3 dB."""


@dataclass(frozen=True, eq=False)
class LoopScan:
    """One loop with the nominal board in it.

    Parameters
    ----------
    sweep
        The same loop on its dense grid.
    panels
        In ln of frequency in Hz; their edges are points of `points`.
    points, loop, turns
        Frequencies [Hz] shape (F,), L of the nominal board there, and how 1 + L turns between
        them [rad], shape (F - 1,).
    nominal
        ln of (response of the nominal board over H(s)) at the nodes.
    scale
        By panel, how many times larger an error of ln H may be there.
    start
        First panel whose turns count.
    """

    sweep: LoopSweep
    panels: Panels
    points: Real
    loop: Complex
    turns: Real
    nominal: Complex
    scale: Real
    start: int

    @classmethod
    def of(cls, sweep: LoopSweep, pilot: Drawn) -> LoopScan | None:
        """The scan for boards like `pilot`; None where panels are no better than the grid."""
        settled = settled_turns(sweep.at, sweep.grid, sweep.reference, sweep.parts)
        if settled is None:
            return None
        points, loop, turns = settled
        places = _panel_edges(sweep, pilot, points, loop)
        if places is None:
            return None
        panels = Panels(np.log(points[places]))
        response, target = _both(sweep, np.exp(panels.nodes))
        ratio = response / target
        start = 0
        if sweep.target.poles_at_origin:
            # The finite gain of op-amps: counted is from where the board is like H(s).
            alike = np.flatnonzero(np.abs(ratio[::DEGREE][:-1] - 1) < LIKE_TARGET / 2)
            if not alike.size:
                return None
            start = int(alike[0])
        return cls(
            sweep,
            panels,
            points,
            loop,
            turns,
            np.log(np.abs(ratio)) + 1j * np.unwrap(np.angle(ratio)),
            _scales(loop, places),
            start,
        )

    def apart(self, drawn: Drawn) -> Complex:
        """ln of (response over that of the nominal board) at the nodes."""
        frequency = np.exp(self.panels.nodes)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = self.sweep.boards(frequency, drawn) / self._response
            angle = np.angle(ratio)
            if not np.all(np.abs(np.diff(angle, axis=1)) < np.pi):
                angle = np.unwrap(angle, axis=1)
            return np.asarray(np.log(np.abs(ratio)) + 1j * angle)

    def follows(self, apart: Complex, high: Complex) -> Mask:
        """Which boards the panels follow closely enough, by what `apart` found and the
        coefficients of its high orders."""
        last = np.abs(high[:, :, -2:] + self._high_of_nominal).max(axis=2)
        sound = np.all(last <= KEPT * self.scale, axis=1) & np.isfinite(apart).all(axis=1)
        if self.start or self.sweep.target.poles_at_origin:
            ratio = np.exp((apart + self.nominal)[:, DEGREE * self.start])
            sound &= np.abs(ratio - 1) < LIKE_TARGET
        return np.asarray(sound)

    @cached_property
    def x(self) -> Real:
        """ln of the frequencies of the grid."""
        return np.log(self.points)

    @cached_property
    def logarithm(self) -> Complex:
        """ln L of the nominal board on the grid."""
        with np.errstate(divide="ignore"):
            return np.asarray(np.log(self.loop))

    @cached_property
    def ends(self) -> Index:
        """The points on the edges of the panels."""
        return np.searchsorted(self.x, self.panels.edges)

    @cached_property
    def crest(self) -> Real:
        """Largest |T| of the nominal loop in each panel."""
        with np.errstate(divide="ignore"):
            size = np.abs(self.loop / (1 + self.loop))
        return np.array([size[a : b + 1].max() for a, b in _pairs(self.ends)])

    @cached_property
    def _high_of_nominal(self) -> Complex:
        return self.panels.high_orders(self.nominal[None])[:, :, -2:]

    @cached_property
    def panel_of_point(self) -> Index:
        """The panel that holds each point of the grid."""
        return self.panels.panel_of(self.x)

    @cached_property
    def _response(self) -> Complex:
        return _both(self.sweep, np.exp(self.panels.nodes))[0]


def _both(sweep: LoopSweep, frequency_hz: Real) -> tuple[Complex, Complex]:
    """Response of the nominal board and H(s)."""
    nominal = sweep.sign * sweep.program.solve(frequency_hz)
    return np.asarray(nominal), sweep.target.response(frequency_hz)


def _panel_edges(sweep: LoopSweep, pilot: Drawn, points: Real, loop: Complex) -> Index | None:
    """The points between which the panels follow the nominal board and those of the pilot; None
    where that takes too many nodes."""
    ends = [*range(0, points.size - 1, WIDEST), points.size - 1]
    unsettled, settled = list(_pairs(np.array(ends))), [points.size - 1]
    while unsettled:
        if DEGREE * (len(settled) + len(unsettled)) > min(MOST_NODES, sweep.grid.size):
            return None
        panels = [Panels(np.log(points[list(pair)])) for pair in unsettled]
        frequency = np.exp(np.concatenate([p.nodes for p in panels]))
        nominal, target = _both(sweep, frequency)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.vstack([nominal, sweep.boards(frequency, pilot)]) / target
        again = []
        for k, (panel, (a, b)) in enumerate(zip(panels, unsettled, strict=True)):
            own = ratio[:, (DEGREE + 1) * k : (DEGREE + 1) * (k + 1)]
            with np.errstate(divide="ignore", invalid="ignore"):
                logarithm = np.log(np.abs(own)) + 1j * np.unwrap(np.angle(own), axis=1)
                last = np.abs(panel.high_orders(logarithm)[:, 0, -2:]).max()
            if last <= BUILT * _scales(loop, np.array([a, b]))[0]:
                settled.append(a)
            elif b - a < 2:
                return None
            else:
                again += [(a, (a + b) // 2), ((a + b) // 2, b)]
        unsettled = again
    return np.array(sorted(settled))


def _scales(loop: Complex, places: Index) -> Real:
    """How far |L| of the nominal board stays from 1, up or down, in each panel: a ratio, at most
    `LOOSEST`."""
    size = np.abs(loop)
    with np.errstate(divide="ignore"):
        away = np.minimum(np.maximum(size, 1 / size), LOOSEST)
    return np.array([away[a : b + 1].min() for a, b in _pairs(places)])


def _pairs(places: Index) -> list[tuple[int, int]]:
    return list(zip(places[:-1].tolist(), places[1:].tolist(), strict=True))
