"""Monte Carlo: many boards with parts drawn from a population.

What is not on the board (the resistance of the source, the load) stays as it is.  Without more
being stated each bought part is uniform within +-tolerance of its value: pessimistic, since real
lots crowd around a mean, and common practice where nothing is known of the lot; op-amps have
their figures.

Board k of a seed is the same whatever the number of boards and the size of the blocks.  Memory is
bounded: errors are kept in single precision for as many frequencies as fit, and further
frequencies are run again with the same boards.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.boardruns import Driver, ToleranceResult
from synth.circuit import Circuit
from synth.errors import CircuitError, JobError
from synth.evidence import DB_PER_NEPER, WorstBoard
from synth.job import Accept
from synth.nodal import NodalProgram
from synth.population import Population
from synth.tolerance.drawing import BoardSource, Drawn
from synth.tolerance.failures import DriverTally, FailureTally, Place
from synth.tolerance.interval import clopper_pearson

__all__ = ["drawn_blocks", "drawn_values", "run_boards", "tolerances_of"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

BLOCK = 500
"""Boards run at once."""

STORE = 140_000_000
"""Bytes that hold errors until their percentiles are taken."""

WORST = 5
"""Boards whose values are kept, so that the simulator can be asked about them too."""


def tolerances_of(circuit: Circuit) -> Real:
    """Relative tolerance of every passive in circuit order, 0 for what is not on the board."""
    return np.array([p.tolerance for p in circuit.passives], dtype=float)


def drawn_values(
    circuit: Circuit, boards: int, seed: int, population: Population | None = None
) -> Real:
    """Values of the passives of the first so many boards, shape (boards, P) [ohm], [F]."""
    return BoardSource(circuit, population or Population(), seed).draw(boards).values


def drawn_blocks(
    circuit: Circuit, population: Population | None = None, *, boards: int, seed: int
) -> Iterator[tuple[int, int, Drawn]]:
    """(first board, last + 1, boards) of a run, block by block."""
    source = BoardSource(circuit, population or Population(), seed)
    for start in range(0, boards, BLOCK):
        stop = min(start + BLOCK, boards)
        yield start, stop, source.draw(stop - start)


def run_boards(
    program: NodalProgram,
    circuit: Circuit,
    target_response: ArrayLike,
    frequency_hz: ArrayLike,
    *,
    accept: Accept,
    boards: int,
    seed: int,
    population: Population | None = None,
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
    population
        Where the parts come from; None: each uniform within its tolerance.
    progress
        Called with (boards done, boards) as the run goes on.
    confidence
        Of the interval of the yield.

    Raises
    ------
    JobError
        A number of boards below 1, a negative seed, or a network of parts the circuit does not
        have.
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
    run = _Run(program, circuit, frequency, target, population or Population(), boards, seed)
    at_once = max(1, STORE // (8 * boards))
    percentiles = np.empty((4, frequency.size))
    tally = FailureTally(frequency, accept)
    worst_db, worst_share = np.empty(boards), np.empty(boards)
    for first in range(0, frequency.size, at_once):
        kept = slice(first, min(first + at_once, frequency.size))
        store = np.empty((2, kept.stop - first, boards), dtype=np.float32)
        for start, stop, db, deg in run.errors(slice(None) if first == 0 else kept):
            width = store.shape[1]
            store[0, :, start:stop] = db[:, :width].T
            store[1, :, start:stop] = deg[:, :width].T
            if first == 0:
                worst_db[start:stop], worst_share[start:stop] = tally.add(db, deg)
                if progress is not None:
                    progress(stop, boards)
        for quantity in (0, 1):
            percentiles[2 * quantity : 2 * quantity + 2, kept] = _percentiles(store[quantity])
        del store
    passed = boards - tally.failed
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
        failures=tally.failures(),
        drivers=run.drivers(tally.places()),
        worst=run.worst(worst_share),
    )


@dataclass(frozen=True)
class _Run:
    program: NodalProgram
    circuit: Circuit
    frequency: Real
    target: Complex
    population: Population
    boards: int
    seed: int

    def errors(self, kept: slice) -> Iterator[tuple[int, int, Real, Real]]:
        """(first board, last + 1, dB, deg) block by block, shapes (block, frequencies kept)."""
        for start, stop, drawn in self.blocks():
            yield start, stop, *self._errors_of(drawn, kept)

    def drivers(self, places: tuple[Place, ...]) -> tuple[Driver, ...]:
        """The parts that drive the errors at these places: the same boards once more."""
        tally = DriverTally(self.circuit, places)
        if not places or self.boards < DriverTally.LEAST_BOARDS:
            return ()
        for _, _, drawn in self.blocks():
            tally.add(drawn, *self._errors_of(drawn, [p.index for p in places]))
        return tally.drivers()

    def worst(self, share: Real) -> tuple[WorstBoard, ...]:
        """The boards with the largest shares of a limit, the worst first; `share` per board."""
        share = np.nan_to_num(share, nan=np.inf)
        numbers = np.argsort(-share, kind="stable")[:WORST].tolist()
        found: dict[int, Drawn] = {}
        for start, stop, drawn in self.blocks():
            found |= {
                n: drawn.part(slice(n - start, n - start + 1)) for n in numbers if start <= n < stop
            }
        return tuple(_worst_board(n, float(share[n]), found[n]) for n in numbers)

    def blocks(self) -> Iterator[tuple[int, int, Drawn]]:
        return drawn_blocks(self.circuit, self.population, boards=self.boards, seed=self.seed)

    def _errors_of(self, drawn: Drawn, kept: slice | list[int]) -> tuple[Real, Real]:
        with np.errstate(divide="ignore"):
            inverse_target = 1.0 / self.target[kept]
        ratio = self.program.solve(
            self.frequency[kept], values=drawn.values, gain_bandwidth=drawn.gain_bandwidth
        )
        return _errors(np.multiply(ratio, inverse_target, out=ratio))


def _worst_board(number: int, share: float, drawn: Drawn) -> WorstBoard:
    gain_bandwidth = drawn.gain_bandwidth
    return WorstBoard(
        number=number,
        limit_share=share,
        values=tuple(drawn.values[0].tolist()),
        gain_bandwidth=None if gain_bandwidth is None else tuple(gain_bandwidth[0].tolist()),
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
