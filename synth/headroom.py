"""Which limit of the op-amps bites first: the one with the least room left.

Swing, slew rate and output current grow with the input; gain-bandwidth does not.
"""

from __future__ import annotations

from dataclasses import dataclass

from synth.bandwidth import gain_bandwidth_needed
from synth.results import Design

__all__ = ["Tightest", "tightest_limit"]


@dataclass(frozen=True, kw_only=True)
class Tightest:
    """The limit with the least room.

    `quantity` is ``"swing"``, ``"slew rate"``, ``"output current"`` or ``"gain-bandwidth"``,
    `amplifier` the op-amp (all of them for gain-bandwidth: ``""``), `ratio` what the op-amp has
    over what is needed; below 1 the limit is missed.
    """

    quantity: str
    amplifier: str
    ratio: float


def tightest_limit(design: Design) -> Tightest | None:
    """The smallest ratio of limit to need over all op-amps; None without op-amps."""
    found = [
        Tightest(quantity=quantity, amplifier=s.amplifier, ratio=limit / need)
        for s in design.swings
        for quantity, limit, need in (
            ("swing", s.peak_limit, s.peak),
            ("slew rate", s.slew_limit, s.slew),
            ("output current", s.current_limit, s.current),
        )
        if need > 0
    ]
    frequency = design.frequency_hz
    target = design.wanted.response(frequency)
    need = gain_bandwidth_needed(
        design.circuit, target, frequency, accept=design.job.accept, wanted=design.wanted
    )
    if need is not None:
        has = design.job.board.op_amp.gain_bandwidth
        found.append(Tightest(quantity="gain-bandwidth", amplifier="", ratio=has / need))
    return min(found, key=lambda t: t.ratio, default=None)
