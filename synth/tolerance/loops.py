"""Margins and stability of the loop around every board of a run.

What `synth.loop.loop_margins` reads off one loop, here for many boards at once.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from synth.circuit import Circuit
from synth.evidence import Check
from synth.job import Loop
from synth.loop import LoopBoards, Percentiles
from synth.nodal import NodalProgram
from synth.population import Population
from synth.quantities import show_share
from synth.tolerance.boards import drawn_blocks
from synth.tolerance.drawing import Drawn
from synth.tolerance.interval import clopper_pearson
from synth.tolerance.loopblock import scanned_margins
from synth.tolerance.loopscan import LoopScan
from synth.tolerance.loopsweep import LoopSweep
from synth.tolerance.oscillation import OscillationWatch
from synth.transfer import TransferFunction

__all__ = ["BoardMargins", "board_margins", "loop_yield_check", "run_loops"]

Real = NDArray[np.float64]
_Margins = Callable[[Drawn], Real]

BLOCK = 1000
"""Boards that are scanned at once."""

PILOT = 48
"""Boards, the first ones, that tell how dense the frequencies of a scan must be."""

WORK = 10_000_000
"""Boards times points of the grid where responses are too sharp for a scan, about 2 s: then only
the first boards are done, as many as that allows."""


@dataclass(frozen=True, kw_only=True)
class BoardMargins:
    """What `LoopMargins` says, for many boards, shapes (boards,); NaN stands for None."""

    crossover_hz: Real
    phase_margin_deg: Real
    gain_margin_db: Real
    disk_margin: Real
    unstable_poles: Real

    @classmethod
    def of(cls, rows: Real) -> BoardMargins:
        """From one row a margin, in the order of the fields."""
        return cls(**dict(zip(cls.__dataclass_fields__, rows, strict=True)))

    @property
    def stable(self) -> NDArray[np.bool_]:
        """Which closed loops are known to be stable."""
        return np.asarray(self.unstable_poles == 0)


def run_loops(
    program: NodalProgram,
    circuit: Circuit,
    loop: Loop,
    target: TransferFunction,
    *,
    inverted: bool,
    boards: int,
    seed: int,
    population: Population | None = None,
    progress: Callable[[int, int], None] | None = None,
    confidence: float = 0.95,
) -> LoopBoards:
    """Margins over the boards that `run_boards` draws with the same seed and population: all, or
    the first ones, as `WORK` allows, where their responses are too sharp for a `LoopScan`.

    Parameters
    ----------
    program, circuit
        As `run_boards`.
    target
        H(s), not inverted.
    inverted
        Whether the board is one of -H(s), to be inverted once more.
    progress
        Called with (boards done, boards) as the run goes on.
    """
    pilot = next(drawn_blocks(circuit, population, boards=min(boards, PILOT), seed=seed))[2]
    margins, most = _margins_of(program, loop, target, pilot, inverted=inverted)
    boards = min(boards, most)
    blocks = drawn_blocks(circuit, population, boards=boards, seed=seed, block=BLOCK)
    each = np.empty((len(BoardMargins.__dataclass_fields__), boards))
    for start, stop, drawn in blocks:
        each[:, start:stop] = margins(drawn)
        if progress is not None:
            progress(stop, boards)
    found = BoardMargins.of(each)
    stable = found.stable
    passed, short = stable.copy(), []
    for margin, limit in (
        (found.phase_margin_deg, loop.phase_margin_deg),
        (found.gain_margin_db, loop.gain_margin_db),
    ):
        kept = np.isnan(margin) | (limit is None or margin >= limit)
        short.append(int((stable & ~kept).sum()))
        passed &= kept
    low, high = clopper_pearson(int(passed.sum()), boards, confidence)
    return LoopBoards(
        boards=boards,
        stable=int(stable.sum()),
        passed=int(passed.sum()),
        low=low,
        high=high,
        confidence=confidence,
        phase_margin_deg=_percentiles(_ordered(found.phase_margin_deg, stable)),
        gain_margin_db=_percentiles(_ordered(found.gain_margin_db, stable)),
        crossover_hz=_percentiles(found.crossover_hz[~np.isnan(found.crossover_hz)]),
        disk_margin=_percentiles(found.disk_margin),
        short_of_phase=short[0],
        short_of_gain=short[1],
    )


def board_margins(
    program: NodalProgram,
    loop: Loop,
    target: TransferFunction,
    drawn: Drawn,
    *,
    inverted: bool = False,
) -> BoardMargins:
    """Margins of the boards that were drawn."""
    pilot = drawn.part(slice(0, PILOT))
    margins, _ = _margins_of(program, loop, target, pilot, inverted=inverted)
    starts = range(0, len(drawn.values), BLOCK)
    rows = [margins(drawn.part(slice(start, start + BLOCK))) for start in starts]
    return BoardMargins.of(np.concatenate(rows, axis=1))


def _margins_of(
    program: NodalProgram, loop: Loop, target: TransferFunction, pilot: Drawn, *, inverted: bool
) -> tuple[_Margins, int]:
    """What finds the margins of boards like those of the pilot, and of how many it should."""
    sweep = LoopSweep.of(program, loop, target, -1.0 if inverted else 1.0)
    scan = LoopScan.of(sweep, pilot)
    found = sweep.margins if scan is None else partial(scanned_margins, scan)
    watch = OscillationWatch(program, target)

    def margins(drawn: Drawn) -> Real:
        return found(drawn, watch.excess(drawn))

    return margins, max(WORK // sweep.grid.size, 1) if scan is None else sys.maxsize


def loop_yield_check(found: LoopBoards) -> Check:
    """How many boards keep the loop, a line of the verdict without a limit of its own."""
    note = (
        f"{found.passed} of {found.boards} boards stable and within the margins, "
        f"{show_share(found.low)} to {show_share(found.high)} at "
        f"{100 * found.confidence:.0f} % confidence"
    )
    return Check.at_least("yield of the loop", 100 * found.share, None, "%", note)


def _ordered(margin: Real, stable: NDArray[np.bool_]) -> Real:
    """Margins so that a larger one is better on every board."""
    return np.where(stable, np.nan_to_num(margin, nan=np.inf), -np.abs(np.nan_to_num(margin)))


def _percentiles(values: Real) -> Percentiles:
    """The 5th, 50th and 95th, each one of the values; infinity and no values at all are None."""
    ordered = np.sort(values)
    ranks = [max(math.ceil(share * ordered.size) - 1, 0) for share in (0.05, 0.5, 0.95)]
    found = [float(ordered[k]) if ordered.size else math.inf for k in ranks]
    p5, p50, p95 = (v if math.isfinite(v) else None for v in found)
    return Percentiles(p5=p5, p50=p50, p95=p95)
