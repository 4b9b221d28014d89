"""What a user asks for, as values that check themselves.

A `Job` is what every later stage reads.  SI units; frequencies a person states stay in
Hz and carry ``_hz`` in their name.
"""

from __future__ import annotations

import math
import re
from collections import Counter
from dataclasses import dataclass, field

from synth.errors import JobError
from synth.parts import OpAmp, PartRule, VendorModel
from synth.population import Population
from synth.preferred import nearest
from synth.quantities import show
from synth.transfer import TransferFunction

__all__ = ["Accept", "Board", "Job", "JobText", "Loop", "Signal"]

_FIXABLE = re.compile(r"[RC][1-9][0-9]{0,4}")


@dataclass(frozen=True, kw_only=True)
class Signal:
    """The signal the board sees.

    Parameters
    ----------
    band_hz
        Lowest and highest frequency at which the response must hold [Hz].
    input_peak
        Largest input [V].
    swing
        ``"sine"``: the input is a sine of any frequency, and peaks follow from the Linf
        norm; ``"any"``: any waveform below `input_peak`, and peaks follow from the L1 norm.
    source_resistance
        Of the source that drives the board [ohm].
    load
        Resistance from the output to ground [ohm], or None.
    """

    band_hz: tuple[float, float]
    input_peak: float = 1.0
    swing: str = "sine"
    source_resistance: float = 0.0
    load: float | None = None

    def __post_init__(self) -> None:
        low, high = self.band_hz
        if not (0 < low < high < math.inf):
            raise JobError(
                f"got {low:g} Hz to {high:g} Hz, expected 0 < lowest < highest", key="signal.band"
            )
        if not (0 < self.input_peak < math.inf):
            raise JobError(
                f"got {self.input_peak}, expected a positive voltage", key="signal.input_peak"
            )
        if self.swing not in ("sine", "any"):
            raise JobError(f"got {self.swing!r}, expected 'sine' or 'any'", key="signal.swing")
        if not (0 <= self.source_resistance < math.inf):
            raise JobError(
                f"got {self.source_resistance}, expected zero or a positive resistance",
                key="signal.source_resistance",
            )
        if self.load is not None and not (0 < self.load < math.inf):
            raise JobError(f"got {self.load}, expected a positive resistance", key="signal.load")


@dataclass(frozen=True, kw_only=True)
class Board:
    """What the board is built from.

    Parameters
    ----------
    op_amp
        Figures of the op-amp.
    resistors, capacitors
        Which values may be bought.
    supply
        Negative and positive rail [V].
    form
        Name of a realization, or ``"auto"``.
    inverted
        ``"no"``: the output is H(s); ``"yes"``: it is -H(s); ``"either"``: as cheaper.
    fixed
        References and the values [ohm], [F] they must have: within the range of their kind and,
        where there is a stock, in it; of a series they need not be.
    share_values
        Whether fewer distinct values are worth a slightly larger error.
    pairs
        Whether two resistors may stand for one where one cannot reach the limit.
    population
        From what population the parts of the boards come.
    vendor_model
        A model of the op-amp to simulate the response with as well; no check rests on it.
    """

    op_amp: OpAmp
    resistors: PartRule
    capacitors: PartRule
    supply: tuple[float, float] = (-12.0, 12.0)
    form: str = "auto"
    inverted: str = "no"
    fixed: tuple[tuple[str, float], ...] = ()
    share_values: bool = False
    pairs: bool = False
    population: Population = field(default_factory=Population)
    vendor_model: VendorModel | None = None

    def __post_init__(self) -> None:
        low, high = self.supply
        if not (-math.inf < low < 0 < high < math.inf):
            raise JobError(
                f"got rails of {low:g} V and {high:g} V, expected one below and one above ground",
                key="board.supply",
            )
        if self.swing_limit <= 0:
            raise JobError(
                f"got {self.op_amp.swing_headroom:g} V of headroom on rails of {low:g} V and "
                f"{high:g} V, expected room for a signal",
                key="board.op_amp.swing_headroom",
            )
        if self.inverted not in ("no", "yes", "either"):
            raise JobError(
                f"got {self.inverted!r}, expected 'no', 'yes' or 'either'", key="board.inverted"
            )
        for ref, value in self.fixed:
            self._check_fixed(ref, value)
        used = Counter((ref[0], value) for ref, value in self.fixed)
        for (letter, value), wanted in used.items():
            count = self.rule_of(letter).count_of(value)
            if count is not None and wanted > count:
                refs = ", ".join(r for r, v in self.fixed if v == value and r[0] == letter)
                raise JobError(
                    f"got {refs} of {show(value, 'F' if letter == 'C' else 'ohm')}, expected at "
                    f"most the {count} in the stock",
                    key="board.fixed",
                )

    def rule_of(self, ref: str) -> PartRule:
        """The rule for a part by its reference, ``"R7"`` or ``"C1"``."""
        return self.capacitors if ref.startswith("C") else self.resistors

    def _check_fixed(self, ref: str, value: float) -> None:
        key = f"board.fixed.{ref}"
        if not _FIXABLE.fullmatch(ref):
            raise JobError(f"got {ref!r}, expected a reference such as 'R3' or 'C1'", key=key)
        if [r for r, _ in self.fixed].count(ref) > 1:
            raise JobError("got two values, expected one", key=key)
        rule, unit = self.rule_of(ref), "F" if ref.startswith("C") else "ohm"
        if not rule.smallest * (1 - 1e-9) <= value <= rule.largest * (1 + 1e-9):
            raise JobError(
                f"got {show(value, unit)}, expected {show(rule.smallest, unit)} to "
                f"{show(rule.largest, unit)}, the range of {rule.kind}s",
                key=key,
            )
        if rule.stock and not rule.lines_of(value):
            near = show(nearest(rule.values, value), unit)
            raise JobError(
                f"got {show(value, unit)}, expected a value in the stock; the nearest is {near}",
                key=key,
            )

    @property
    def swing_limit(self) -> float:
        """Largest peak an op-amp output may reach [V]: the nearer rail less the headroom."""
        return min(-self.supply[0], self.supply[1]) - self.op_amp.swing_headroom


@dataclass(frozen=True, kw_only=True)
class Accept:
    """The limits.

    Parameters
    ----------
    magnitude_db
        Largest magnitude error over the band [dB].
    phase_deg
        Largest phase error over the band [deg].
    yield_share
        Smallest share of boards within both limits, a ratio, or None for no limit.
    """

    magnitude_db: float = 0.5
    phase_deg: float = 3.0
    yield_share: float | None = None

    def __post_init__(self) -> None:
        if not (0 < self.magnitude_db < math.inf):
            raise JobError(
                f"got {self.magnitude_db}, expected a positive number of dB", key="accept.magnitude"
            )
        if not (0 < self.phase_deg < math.inf):
            raise JobError(f"got {self.phase_deg}, expected a positive angle", key="accept.phase")
        if self.yield_share is not None and not (0 < self.yield_share <= 1):
            raise JobError(
                f"got {show(self.yield_share, '%')}, expected above 0 and up to 100 %",
                key="accept.yield",
            )


@dataclass(frozen=True, kw_only=True)
class Loop:
    """The plant P(s) exp(-s delay) that the board drives; L = P H, negative feedback.

    `plant` has no more zeros than poles.  `delay` in [s], `phase_margin_deg` in [deg],
    `gain_margin_db` in [dB]; None: no limit.
    """

    plant: TransferFunction
    delay: float = 0.0
    phase_margin_deg: float | None = None
    gain_margin_db: float | None = None

    def __post_init__(self) -> None:
        if self.plant.relative_degree < 0:
            zeros, poles = (len(p) - 1 for p in (self.plant.numerator, self.plant.denominator))
            raise JobError(
                f"got {zeros} zeros and {poles} pole{'' if poles == 1 else 's'}, expected a plant "
                "with no more zeros than poles",
                key="loop.numerator",
            )
        if not (0 <= self.delay < math.inf):
            raise JobError(f"got {self.delay}, expected zero or a positive time", key="loop.delay")


@dataclass(frozen=True, kw_only=True)
class JobText:
    """What a job was read from, so that a pack can carry it.

    Parameters
    ----------
    name
        Name of the file, without its folder.
    text
        Its content.
    files
        Name, as the job states it, and content of every further file it names.
    """

    name: str
    text: str
    files: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, kw_only=True)
class Job:
    """A whole job.

    Parameters
    ----------
    target
        H(s), reduced and checked.
    notices
        What the reader of the job should know, one sentence each: a pole and a zero that
        cancelled, a band that misses every root.
    source
        The text it was read from, where there is one; two jobs that ask for the same are equal
        whatever they were read from.
    """

    target: TransferFunction
    signal: Signal
    board: Board
    accept: Accept = field(default_factory=Accept)
    loop: Loop | None = None
    title: str = "untitled"
    notices: tuple[str, ...] = ()
    source: JobText | None = field(default=None, compare=False, repr=False)
