"""Monte Carlo: many boards with parts drawn from a population.

What is not on the board (the resistance of the source, the load) stays as it is.  Without more
being stated each bought part is uniform within +-tolerance of its value: pessimistic, since real
lots crowd around a mean, and common practice where nothing is known of the lot; op-amps have
their figures.

Board k of a seed is the same whatever the number of boards and the size of the blocks.  Every board
is solved once, and memory is bounded: of many boards only the errors near a percentile are kept, in
single precision; a frequency at which that fails is run again with the same boards.
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
from synth.tolerance.oscillation import OscillationWatch
from synth.tolerance.percentiles import RowPercentiles, percentiles_of_rows
from synth.transfer import TransferFunction

__all__ = ["drawn_blocks", "drawn_values", "run_boards", "tolerances_of"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

BLOCK = 500
"""Boards run at once."""

STORE = 140_000_000
"""Bytes that hold the errors at frequencies that are run again."""

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
    circuit: Circuit,
    population: Population | None = None,
    *,
    boards: int,
    seed: int,
    block: int | None = None,
) -> Iterator[tuple[int, int, Drawn]]:
    """(first board, last + 1, boards) of a run, `block` boards at once (None: `BLOCK`)."""
    source = BoardSource(circuit, population or Population(), seed)
    step = block or BLOCK
    for start in range(0, boards, step):
        stop = min(start + step, boards)
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
    wanted: TransferFunction | None = None,
) -> ToleranceResult:
    """Run `boards` boards and count those whose error keeps both limits at every frequency and
    that are stable by themselves.

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
    wanted
        H(s), whose poles tell where those of a board belong; None: nobody looks at poles.

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
    tally, worst = FailureTally(frequency, accept), _WorstBoards()
    watch = None if wanted is None else OscillationWatch(program, wanted)
    worst_db, unstable, both = np.empty(boards), 0, 0
    percentiles = RowPercentiles(2 * frequency.size, boards, min(BLOCK, boards))
    for start, stop, drawn, db, deg in run.errors(slice(None)):
        worst_db[start:stop], share = tally.add(db, deg)
        worst.add(start, share, drawn)
        if watch is not None:
            oscillates = watch.excess(drawn) != 0
            unstable += int(oscillates.sum())
            both += int((oscillates & ~(share <= 1)).sum())
        percentiles.add(np.concatenate([db.T, deg.T], dtype=np.float32, casting="same_kind"))
        if progress is not None:
            progress(stop, boards)
    found, lost = percentiles.found()
    run.again(np.unique(lost % frequency.size), found)
    passed = boards - tally.failed - (unstable - both)
    low, high = clopper_pearson(passed, boards, confidence)
    return ToleranceResult(
        boards=boards,
        passed=passed,
        low=low,
        high=high,
        confidence=confidence,
        frequency_hz=frequency,
        magnitude_5=found[0, : frequency.size],
        magnitude_95=found[1, : frequency.size],
        phase_5=found[0, frequency.size :],
        phase_95=found[1, frequency.size :],
        error_95_db=float(np.percentile(worst_db, 95)),
        seed=seed,
        failures=tally.failures(),
        drivers=run.drivers(tally.places()),
        worst=worst.found(),
        unstable=unstable,
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

    def errors(self, kept: slice | list[int]) -> Iterator[tuple[int, int, Drawn, Real, Real]]:
        """(first board, last + 1, boards, dB, deg) block by block, errors of shapes
        (block, frequencies kept)."""
        for start, stop, drawn in self.blocks():
            yield start, stop, drawn, *self._errors_of(drawn, kept)

    def again(self, places: NDArray[np.intp], percentiles: Real) -> None:
        """Put in the percentiles at some frequencies, of all errors of the same boards there.

        `percentiles` has the shape (shares, 2 F): those of the magnitude, then of the phase.
        """
        at_once = max(1, STORE // (8 * self.boards))
        for first in range(0, places.size, at_once):
            kept = places[first : first + at_once]
            store = np.empty((2, kept.size, self.boards), dtype=np.float32)
            for start, stop, _, db, deg in self.errors(kept.tolist()):
                store[0, :, start:stop], store[1, :, start:stop] = db.T, deg.T
            for quantity in (0, 1):
                rows = kept + quantity * self.frequency.size
                percentiles[:, rows] = percentiles_of_rows(store[quantity])

    def drivers(self, places: tuple[Place, ...]) -> tuple[Driver, ...]:
        """The parts that drive the errors at these places: the same boards once more."""
        tally = DriverTally(self.circuit, places)
        if not places or self.boards < DriverTally.LEAST_BOARDS:
            return ()
        for _, _, drawn in self.blocks():
            tally.add(drawn, *self._errors_of(drawn, [p.index for p in places]))
        return tally.drivers()

    def blocks(self) -> Iterator[tuple[int, int, Drawn]]:
        return drawn_blocks(self.circuit, self.population, boards=self.boards, seed=self.seed)

    def _errors_of(self, drawn: Drawn, kept: slice | list[int]) -> tuple[Real, Real]:
        with np.errstate(divide="ignore"):
            inverse_target = 1.0 / self.target[kept]
        ratio = self.program.solve(
            self.frequency[kept], values=drawn.values, gain_bandwidth=drawn.gain_bandwidth
        )
        return _errors(np.multiply(ratio, inverse_target, out=ratio))


class _WorstBoards:
    """The boards with the largest shares of a limit, the worst first, earlier ones before."""

    def __init__(self) -> None:
        self._boards: list[WorstBoard] = []

    def add(self, first: int, share: Real, drawn: Drawn) -> None:
        """A block of boards, `first` the number of its first one; `share` per board."""
        share = np.nan_to_num(share, nan=np.inf)
        candidates = np.argsort(-share, kind="stable")[:WORST].tolist()
        self._boards += [
            _worst_board(first + k, float(share[k]), drawn.part(slice(k, k + 1)))
            for k in candidates
        ]
        self._boards = sorted(self._boards, key=lambda b: -b.limit_share)[:WORST]

    def found(self) -> tuple[WorstBoard, ...]:
        """Those of all blocks."""
        return tuple(self._boards)


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
