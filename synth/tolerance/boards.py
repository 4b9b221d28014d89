"""Monte Carlo: many boards with parts drawn within their tolerance.

A bought part is uniform within +-tolerance of its value: pessimistic, since real lots crowd around
a mean, and common practice where nothing is known of the lot.  What is not on the board (the
resistance of the source, the load) stays as it is, and so do the op-amps.

Board k of a seed is the same whatever the number of boards and the size of the blocks: parts are
drawn board by board from one generator.  Memory is bounded: errors are kept in single precision
for as many frequencies as fit, and further frequencies are run again with the same boards.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.circuit import Circuit
from synth.errors import CircuitError, JobError
from synth.evidence import DB_PER_NEPER, WorstBoard
from synth.job import Accept
from synth.nodal import NodalProgram
from synth.results import ToleranceResult
from synth.tolerance.interval import clopper_pearson

__all__ = ["drawn_blocks", "drawn_values", "run_boards", "tolerances_of"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

BLOCK = 500
"""Boards run at once."""

STORE = 170_000_000
"""Bytes that hold errors until their percentiles are taken."""

WORST = 5
"""Boards whose values are kept, so that the simulator can be asked about them too."""


def tolerances_of(circuit: Circuit) -> Real:
    """Relative tolerance of every passive in circuit order, 0 for what is not on the board."""
    return np.array([p.tolerance for p in circuit.passives], dtype=float)


def drawn_values(circuit: Circuit, boards: int, generator: np.random.Generator) -> Real:
    """Values of the passives of so many boards, shape (boards, P) [ohm], [F].

    Draws one number per bought part, board by board.
    """
    nominal = np.array([p.value for p in circuit.passives], dtype=float)
    bought = np.array([p.on_board for p in circuit.passives], dtype=bool)
    values = np.tile(nominal, (boards, 1))
    deviation = generator.uniform(-1.0, 1.0, (boards, int(bought.sum())))
    values[:, bought] *= 1.0 + deviation * tolerances_of(circuit)[bought]
    return values


def drawn_blocks(circuit: Circuit, *, boards: int, seed: int) -> Iterator[tuple[int, Real]]:
    """(first board, values) of a run, block by block, values of shape (block, P) [ohm], [F]."""
    generator = np.random.default_rng(seed)
    for start in range(0, boards, BLOCK):
        yield start, drawn_values(circuit, min(BLOCK, boards - start), generator)


def run_boards(
    program: NodalProgram,
    circuit: Circuit,
    target_response: ArrayLike,
    frequency_hz: ArrayLike,
    *,
    accept: Accept,
    boards: int,
    seed: int,
    progress: Callable[[int, int], None] | None = None,
    confidence: float = 0.95,
) -> ToleranceResult:
    """Run `boards` boards and count those whose error keeps both limits at every frequency.

    Parameters
    ----------
    program
        Compiled from `circuit`, or from one that differs from it in values alone.
    circuit
        Values and tolerances.
    target_response
        What the output should show, complex, shape (F,).
    frequency_hz
        Where it is compared [Hz], shape (F,).
    accept
        The limits; the phase is compared modulo 360 deg.
    seed
        Of ``numpy.random.default_rng``.
    progress
        Called with (boards done, boards) as the run goes on.
    confidence
        Of the interval of the yield.

    Raises
    ------
    JobError
        A number of boards below 1, or a negative seed.
    CircuitError
        A program of another circuit, or a target of another shape.
    NumericalError
        The equations are singular on a board.
    """
    frequency, target = _checked(program, circuit, target_response, frequency_hz)
    if boards < 1:
        raise JobError(f"got {boards} boards, expected 1 or more", key="boards")
    if seed < 0:
        raise JobError(f"got the seed {seed}, expected 0 or more", key="seed")
    clopper_pearson(0, boards, confidence)
    run = _Run(program, circuit, frequency, target, boards, seed)
    at_once = max(1, STORE // (8 * boards))
    percentiles = np.empty((4, frequency.size))
    worst_db, worst_deg = np.empty(boards), np.empty(boards)
    for first in range(0, frequency.size, at_once):
        kept = slice(first, min(first + at_once, frequency.size))
        store = np.empty((2, kept.stop - first, boards), dtype=np.float32)
        for start, stop, db, deg in run.errors(slice(None) if first == 0 else kept):
            if first == 0:
                worst_db[start:stop] = np.abs(db).max(axis=1)
                worst_deg[start:stop] = np.abs(deg).max(axis=1)
                if progress is not None:
                    progress(stop, boards)
            width = store.shape[1]
            store[0, :, start:stop] = db[:, :width].T
            store[1, :, start:stop] = deg[:, :width].T
        for quantity in (0, 1):
            percentiles[2 * quantity : 2 * quantity + 2, kept] = _percentiles(store[quantity])
        del store
    passed = int(((worst_db <= accept.magnitude_db) & (worst_deg <= accept.phase_deg)).sum())
    low, high = clopper_pearson(passed, boards, confidence)
    return ToleranceResult(
        boards=boards,
        passed=passed,
        low=low,
        high=high,
        confidence=confidence,
        frequency_hz=frequency,
        magnitude_5=percentiles[0],
        magnitude_95=percentiles[1],
        phase_5=percentiles[2],
        phase_95=percentiles[3],
        error_95_db=float(np.percentile(worst_db, 95)),
        seed=seed,
        worst=run.worst(np.maximum(worst_db / accept.magnitude_db, worst_deg / accept.phase_deg)),
    )


@dataclass(frozen=True)
class _Run:
    program: NodalProgram
    circuit: Circuit
    frequency: Real
    target: Complex
    boards: int
    seed: int

    def errors(self, kept: slice) -> Iterator[tuple[int, int, Real, Real]]:
        """(first board, last + 1, dB, deg) block by block, shapes (block, frequencies kept)."""
        with np.errstate(divide="ignore"):
            inverse_target = 1.0 / self.target[kept]
        for start, values in self.drawn():
            ratio = self.program.solve(self.frequency[kept], values=values)
            errors = _errors(np.multiply(ratio, inverse_target, out=ratio))
            yield start, start + len(values), *errors

    def drawn(self) -> Iterator[tuple[int, Real]]:
        return drawn_blocks(self.circuit, boards=self.boards, seed=self.seed)

    def worst(self, share: Real) -> tuple[WorstBoard, ...]:
        """The boards with the largest shares of a limit, the worst first; `share` per board."""
        share = np.nan_to_num(share, nan=np.inf)
        numbers = np.argsort(-share, kind="stable")[:WORST].tolist()
        found: dict[int, tuple[float, ...]] = {}
        for start, values in self.drawn():
            here = (n for n in numbers if 0 <= n - start < len(values))
            found |= {n: tuple(values[n - start].tolist()) for n in here}
        return tuple(
            WorstBoard(number=n, limit_share=float(share[n]), values=found[n]) for n in numbers
        )


def _errors(ratio: Complex) -> tuple[Real, Real]:
    """Real part of ln ratio [dB] and its imaginary part [deg], which is within +-180."""
    re, im = np.ascontiguousarray(ratio.real), np.ascontiguousarray(ratio.imag)
    deg = np.arctan2(im, re)
    deg *= 180 / np.pi
    re *= re
    im *= im
    re += im
    with np.errstate(divide="ignore"):
        np.log(re, out=re)
    re *= DB_PER_NEPER / 2
    return re, deg


def _percentiles(rows: NDArray[np.float32], shares: tuple[float, ...] = (0.05, 0.95)) -> Real:
    """Percentiles of every row, linear between neighbours; shape (shares, rows).

    Partitions the rows in place, so that it needs no memory of its own.
    """
    last = rows.shape[1] - 1
    ends = [(int(share * last), min(int(share * last) + 1, last)) for share in shares]
    rows.partition(sorted({k for pair in ends for k in pair}), axis=1)
    out = np.empty((len(shares), rows.shape[0]))
    for k, (share, (low, high)) in enumerate(zip(shares, ends, strict=True)):
        a, b = rows[:, low].astype(float), rows[:, high].astype(float)
        with np.errstate(invalid="ignore"):
            out[k] = np.where(a == b, a, a + (b - a) * (share * last - low))
    return out


def _checked(
    program: NodalProgram, circuit: Circuit, target: ArrayLike, frequency_hz: ArrayLike
) -> tuple[Real, Complex]:
    refs = tuple(p.ref for p in circuit.passives)
    if program.refs != refs:
        raise CircuitError("got a program of another circuit, expected one with the same parts")
    frequency = np.asarray(frequency_hz, dtype=float)
    wanted = np.asarray(target, dtype=complex)
    if frequency.ndim != 1 or frequency.size == 0 or wanted.shape != frequency.shape:
        raise CircuitError(
            f"got a target of shape {wanted.shape} at frequencies of shape {frequency.shape}, "
            "expected one value at each of one or more frequencies"
        )
    return frequency, wanted
