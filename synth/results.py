"""The result of a design: what was asked beside what was reached.

Filled by the stages of `synth.design`, read by everything that draws, writes or checks.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from synth.boardruns import ToleranceResult
from synth.choosing.certificate import Certificate
from synth.circuit import Circuit
from synth.evidence import Check, ResponseError
from synth.graph import BlockGraph
from synth.job import Job
from synth.loop import LoopBoards, LoopMargins
from synth.shortages import Repick
from synth.transfer import TransferFunction
from synth.worstcase import WorstCase

__all__ = [
    "Candidate",
    "Design",
    "Drift",
    "ErrorBudget",
    "ErrorFigures",
    "FormFigures",
    "LoopResult",
    "NoiseResult",
    "OpAmpAllowance",
    "Swing",
    "Tightened",
    "ToleranceResult",
]

Real = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class Swing:
    """What one op-amp output does at the stated input.

    Parameters
    ----------
    amplifier, net
        Reference and output net.
    peak, peak_limit
        Largest output [V] and the nearer rail less the headroom [V].
    peak_hz
        Frequency of the largest output [Hz], 0 for DC; None when the bound is the L1 norm.
    slew, slew_limit
        Largest rate of change within the band [V/s] and the op-amp's slew rate [V/s].
    current, current_limit
        Largest output current into the parts on the net [A] and the op-amp's limit [A].
    """

    amplifier: str
    net: str
    peak: float
    peak_limit: float
    peak_hz: float | None
    slew: float
    slew_limit: float
    current: float
    current_limit: float


@dataclass(frozen=True, kw_only=True)
class Drift:
    """An integrator whose capacitor no resistive path discharges at DC.

    `rate` is how fast its output can move [V/s]: sum |dV| / (R C) + Ib/C over its input resistors
    R, dV its own offset and what those of all op-amps before it leave at each R, of the worst
    signs.  `behind` names the op-amps of further such integrators whose output reaches it; with
    these it has no rate of its own, and `rate` is that while they are still at 0 V.
    """

    amplifier: str
    net: str
    rate: float
    behind: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class NoiseResult:
    """Noise at the output.

    `frequency_hz` and `density` [V/rtHz], shapes (F,); `output_rms` over the band [V].
    `shares` maps a reference to its share of the power, a ratio.
    """

    frequency_hz: Real
    density: Real
    output_rms: float
    shares: dict[str, float]


@dataclass(frozen=True, kw_only=True)
class ErrorFigures:
    """A response error in three numbers: rms of |ln(H/T)|, a ratio, and the largest [dB],
    [deg] over the band."""

    rms: float
    largest_db: float
    largest_deg: float

    @classmethod
    def of(cls, error: ResponseError) -> ErrorFigures:
        """From the error over frequency."""
        return cls(rms=error.rms, largest_db=error.largest_db, largest_deg=error.largest_deg)


@dataclass(frozen=True, kw_only=True)
class OpAmpAllowance:
    """What values gain that are chosen for the op-amps there are.

    Parameters
    ----------
    with_allowance, without_allowance
        Errors on the circuit with the job's op-amps: of the chosen values, and of values
        chosen the same way as if op-amps were ideal.
    slower, faster
        Errors of the chosen values with the gain-bandwidth of all op-amps at `slower_factor`
        and `faster_factor` times its figure.
    """

    with_allowance: ErrorFigures
    without_allowance: ErrorFigures
    slower_factor: float
    slower: ErrorFigures
    faster_factor: float
    faster: ErrorFigures


@dataclass(frozen=True, kw_only=True)
class SpreadShare:
    """A cause of the spread over boards, and its share of the variance.

    Parameters
    ----------
    cause
        ``"own"``: what a part has on its own; ``"lot"``, ``"network"``: what the parts of a reel
        or of a network share; ``"temperature"``: the drift of all parts; ``"op_amp"``: the
        gain-bandwidth of the op-amps of a package.
    refs
        What it moves.
    share
        A ratio; those of all causes add up to 1.
    """

    cause: str
    refs: tuple[str, ...]
    share: float


@dataclass(frozen=True, kw_only=True)
class Tightened:
    """What tighter parts are predicted to give, to first order.

    Parameters
    ----------
    kind
        ``"part"``: one part, or all of a network; ``"resistor"``, ``"capacitor"``: all of a kind.
    refs
        The parts with a tighter grade.
    tolerance, grade
        Tolerance now, and of the next tighter grade, ratios; of the coarsest where they differ.
    spread
        Standard deviation at the frequency of the budget, in its unit.
    error_95_db, limit_share_95
        As in `ErrorBudget`.
    """

    kind: str
    refs: tuple[str, ...]
    tolerance: float
    grade: float
    spread: float
    error_95_db: float
    limit_share_95: float


@dataclass(frozen=True, kw_only=True)
class ErrorBudget:
    """How the error divides between the choice of values and the spread of boards about the
    nominal one, to first order: by part tolerance, temperature and op-amps as the job states them.

    Parameters
    ----------
    quantity, unit, limit
        ``"magnitude"`` in ``"dB"`` or ``"phase"`` in ``"deg"``, whichever is used up more.
    frequency_hz
        Where |nominal error| + `sigmas` standard deviations is the largest share of the limit.
    nominal, spread
        Error of the nominal board and standard deviation over boards there, in `unit`.
    shares
        By falling share: the causes and their shares of the variance there.
    error_95_db, limit_share_95
        95th percentiles over boards: of the largest dB error over the band, and of the largest
        share of a limit, magnitude or phase.
    part, kinds
        The part whose next grade lowers `limit_share_95` most, and all parts of a kind; none
        where no tighter grade is sold.
    """

    quantity: str
    unit: str
    limit: float
    frequency_hz: float
    nominal: float
    spread: float
    sigmas: float
    shares: tuple[SpreadShare, ...]
    error_95_db: float
    limit_share_95: float
    part: Tightened | None
    kinds: tuple[Tightened, ...]

    @property
    def values_share(self) -> float:
        """Share of the choice of values in a board's mean square error there, a ratio."""
        both = self.nominal**2 + self.spread**2
        return self.nominal**2 / both if both else 0.0

    @property
    def tolerance_share(self) -> float:
        """Share of the spread of boards in it, a ratio."""
        both = self.nominal**2 + self.spread**2
        return self.spread**2 / both if both else 0.0

    @property
    def by_cause(self) -> dict[str, float]:
        """Shares of the variance there of ``"parts"`` at 25 deg C, ``"temperature"`` and
        ``"op_amps"``, ratios; only of what spreads, the largest first."""
        found: dict[str, float] = {}
        for one in self.shares:
            name = {"temperature": "temperature", "op_amp": "op_amps"}.get(one.cause, "parts")
            found[name] = found.get(name, 0.0) + one.share
        return dict(sorted(found.items(), key=lambda item: -item[1]))


@dataclass(frozen=True, kw_only=True)
class FormFigures:
    """What a form comes to with standard values.

    Parameters
    ----------
    resistors, capacitors
        How many are bought.
    value_ratio
        Largest over smallest value of a kind, resistors or capacitors, the larger of the two.
    nominal
        Error of the nominal board.
    boards, passed, low, high
        The run of boards, as in `ToleranceResult`.
    error_95_db
        95th percentile over boards of the largest dB error over the band.
    noise_rms
        At the output over the band [V].
    dynamic_range_db
        Largest sine at the output before any op-amp output meets its limit, rms, over the noise.
    peak, hottest
        Largest peak among the op-amp outputs at the stated input [V], and which op-amp has it.
    gain_bandwidth_needed
        Smallest with which the nominal board keeps its limits [Hz]; None where none does.
    missed
        What the nominal board misses, in words; empty where it keeps every limit.
    """

    resistors: int
    capacitors: int
    value_ratio: float
    nominal: ErrorFigures
    boards: int
    passed: int
    low: float
    high: float
    error_95_db: float
    noise_rms: float
    dynamic_range_db: float
    peak: float
    hottest: str
    gain_bandwidth_needed: float | None
    missed: tuple[str, ...] = ()

    @property
    def share(self) -> float:
        """Share of the boards that pass, a ratio."""
        return self.passed / self.boards


@dataclass(frozen=True, kw_only=True)
class Candidate:
    """A form that was considered.

    `spread_db` and `spread_deg` are the predicted spreads of magnitude and phase over the boards of
    the job (one standard deviation, largest over the band) [dB], [deg]; None with a
    `reason` where the form could not be built.  `figures` is there where its values were
    chosen; `verdict` is then ``"pass"`` or ``"fail"``, and `reason` says why it was not taken.
    """

    form: str
    possible: bool
    op_amps: int | None
    spread_db: float | None
    spread_deg: float | None
    reason: str = ""
    figures: FormFigures | None = None
    verdict: str = ""


@dataclass(frozen=True, kw_only=True)
class LoopResult:
    """Margins of the loop with H(s) itself, with the nominal board, and over a run of boards."""

    target: LoopMargins
    nominal: LoopMargins
    boards: LoopBoards | None = None


@dataclass(frozen=True, kw_only=True)
class Design:
    """A finished design, before the simulator has had its say.

    Parameters
    ----------
    job
        What was asked.
    wanted
        What the output net must show: H(s), or -H(s) when `inverted`.
    graph
        The scaled block graph: signals are volts at op-amp outputs, up to polarity.
    circuit
        The circuit with standard values.
    frequency_hz
        The grid over the band on which errors are taken, shape (F,) [Hz].
    nominal, nearest
        Error of the circuit with the chosen values, and with each value rounded to its
        nearest neighbour, computed with the job's op-amp; shape (F,).
    tolerance, noise, swings, drifts
        The evidence.
    offset
        Largest offset of the output at DC from offsets and bias currents of the op-amps, of any
        sign [V]; None where an integrator drifts.
    certificate
        How good any choice of values could be.
    allowance
        What it brings that values are chosen for the job's op-amps.
    budget
        What of the error is the choice of values and what is tolerance.
    worst
        The worst board within tolerance, and what none can pass.
    effort
        Multiple of the default work that the search for values was given.
    loop
        Margins, where the job names a plant.
    candidates
        The forms considered, the chosen one among them.
    checks
        Predicted checks: yield, swing, slew, current.
    notices
        What the user should know, one sentence each.
    repick
        What changed, where this is an earlier design with other values.
    """

    job: Job
    form: str
    inverted: bool
    wanted: TransferFunction
    graph: BlockGraph
    circuit: Circuit
    frequency_hz: Real
    nominal: ResponseError
    nearest: ResponseError
    tolerance: ToleranceResult
    noise: NoiseResult
    swings: tuple[Swing, ...]
    drifts: tuple[Drift, ...]
    candidates: tuple[Candidate, ...]
    checks: tuple[Check, ...]
    offset: float | None = None
    certificate: Certificate | None = None
    allowance: OpAmpAllowance | None = None
    budget: ErrorBudget | None = None
    worst: WorstCase | None = None
    effort: float = 1
    loop: LoopResult | None = None
    notices: tuple[str, ...] = field(default=())
    repick: Repick | None = None
