"""From what a search found to the worst case as plain values."""

from __future__ import annotations

import math
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from synth.evidence import DB_PER_NEPER, response_error
from synth.worstcase.expansion import Parts
from synth.worstcase.result import WorstCase, WorstError

__all__ = ["Found", "without_tolerance", "worst_error"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


class Found(Protocol):
    """The worst board of a search, as multiples (V,), its error [Np] or [rad], the number of its
    frequency and of its sign, and why no bound exists, if so."""

    unit: str
    reached: float
    board: Real
    place: int
    sign: int
    unlimited: str


def worst_error(
    parts: Parts, found: Found, bound: float, everywhere: float, frequency: Real
) -> WorstError:
    """The worst error of a search and what bounds it [Np] or [rad], inf for none, as plain values;
    `frequency` (F,) [Hz]."""
    low, high = parts.box
    low, high = parts.box
    scale = DB_PER_NEPER if found.unit == "dB" else 180 / np.pi
    columns = parts.varied
    refs = [parts.structure.refs[k] for k in columns]
    values, lowest, highest = (parts.values(m)[columns] for m in (found.board, low, high))
    smallest, largest = np.minimum(lowest, highest), np.maximum(lowest, highest)
    at_low = np.isclose(values, smallest, rtol=1e-9, atol=0.0)
    at_high = np.isclose(values, largest, rtol=1e-9, atol=0.0)

    def named(which: NDArray[np.bool_]) -> tuple[str, ...]:
        return tuple(ref for ref, is_so in zip(refs, which, strict=True) if is_so)

    return WorstError(
        unit=found.unit,
        reached=float(scale * max(found.reached, 0.0)),
        sign=1 if found.sign == 0 else -1,
        bound=float(scale * max(bound, 0.0)) if math.isfinite(bound) else None,
        everywhere=float(scale * max(everywhere, 0.0)) if math.isfinite(everywhere) else None,
        unlimited=found.unlimited,
        frequency_hz=float(frequency[found.place]),
        values=dict(zip(refs, values.tolist(), strict=True)),
        low=named(at_low),
        high=named(at_high),
        between=named(~at_low & ~at_high),
    )


def without_tolerance(parts: Parts, target: Complex, frequency: Real) -> WorstCase:
    """Of a circuit with one board only."""
    response = parts.response(
        np.asarray(2j * np.pi * frequency, dtype=np.complex128), np.empty((frequency.size, 0))
    )
    error = response_error(response, target)

    def largest(unit: str, signed: Real) -> WorstError:
        place = int(np.argmax(np.abs(signed)))
        return WorstError(
            unit=unit,
            reached=abs(float(signed[place])),
            sign=1 if signed[place] >= 0 else -1,
            bound=abs(float(signed[place])),
            frequency_hz=float(frequency[place]),
            values={},
            low=(),
            high=(),
            between=(),
        )

    return WorstCase(
        magnitude_db=largest("dB", error.magnitude_db),
        phase_deg=largest("deg", error.phase_deg),
        frequencies=frequency.size,
        boxes=0,
    )
