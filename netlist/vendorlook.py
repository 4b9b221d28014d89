"""A second look at a design with a vendor's model of the op-amp, in ngspice.

Two things: whether the model is an op-amp at all, with its pins in the order the job says, and
what the board's response is with it.  The response is held against the limits and told, but no
check rests on it: the job's figures and the model may be of different minds.  That the output
follows the + input is a check.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from netlist.comparison import compare
from netlist.deck import follower_deck, vendor_deck
from netlist.ngspice import Simulator
from synth.errors import SimulatorError
from synth.evidence import Check, ResponseError, response_error
from synth.grid import judged, sweeps
from synth.quantities import show
from synth.results import Design

__all__ = ["FOLLOWS", "VendorLook", "look_at_vendor_model", "vendor_notices"]

Complex = NDArray[np.complex128]

FOLLOWS = "op-amp model: output follows its + input"
"""Name of the check of the pins."""

DRIVE = 0.05
"""By which the + input is moved up and down [V]: more than any offset, far less than a rail."""

PARTS_OF_SUPPLY = 10
"""The output then rises by at least the supply over this: at +-12 V that needs a gain of 24, which
every op-amp has."""

MOST_LINES = 8
"""Of what ngspice says of a failure; it repeats itself for every op-amp."""

_BESIDE_THE_POINT = re.compile(
    r"Note:|Circuit:|Warning:|Trying gmin|Supplies reduced|Netlist line no|Please check"
    r"|.*ngspice\.dll",
    re.IGNORECASE,
)
_STATE = re.compile(r"Doing analysis|Last Node|.*operating point failed", re.IGNORECASE)


@dataclass(frozen=True, kw_only=True, eq=False)
class VendorLook:
    """What ngspice says of the board with the vendor's model.

    Parameters
    ----------
    difference
        Response with the model against that with the one-pole model, shape (F,); None without
        a response.
    against_target
        Magnitude and phase error of the response with the model against H(s), with the job's
        limits; empty without a response.  They are told, they are no part of the verdict.
    failure
        Why there is no response, or None.
    follows
        The check that the output follows the + input; without a value where ngspice could not
        run the model on its own.
    """

    difference: ResponseError | None = None
    against_target: tuple[Check, ...] = ()
    failure: str | None = None
    follows: Check

    def __post_init__(self) -> None:
        if (self.difference is None) == (self.failure is None):
            raise ValueError("got both or neither of a response and a failure, expected one")

    @property
    def is_silent(self) -> bool:
        """Whether there is a response and it is zero somewhere, as of an output at its rail."""
        return self.difference is not None and not np.isfinite(self.difference.largest_db)

    @property
    def keeps_limits(self) -> bool:
        """Whether there is a response and it is within the limits of the job."""
        return self.failure is None and all(c.passed for c in self.against_target)


def look_at_vendor_model(
    design: Design, simulator: Simulator, simulated: Complex
) -> VendorLook | None:
    """The second look, None where the job names no model.

    `simulated` is the response with the one-pole model at the frequencies judged, shape (F,).
    """
    model = design.job.board.vendor_model
    if model is None:
        return None
    whole, *further = sweeps(design.wanted, design.job.signal.band_hz)
    follows = _follows(design, simulator)
    deck = vendor_deck(
        design.circuit,
        model,
        title=design.job.title,
        supply=design.job.board.supply,
        start_hz=whole.start_hz,
        stop_hz=whole.stop_hz,
        points_per_decade=whole.points_per_decade,
        further=further,
    )
    out = design.circuit.output_net
    try:
        found = simulator.ac(deck, [out])
    except SimulatorError as problem:
        if follows.value is None:
            follows = replace(follows, note="ngspice could not run the model")
        return VendorLook(failure=_told(problem), follows=follows)
    keep = judged(design.wanted, found.frequency_hz)
    frequency_hz, response = found.frequency_hz[keep], found.voltages[out][keep]
    if not np.all(np.isfinite(response)):
        return VendorLook(failure="the response is not a number everywhere", follows=follows)
    target = design.wanted.response(frequency_hz)
    return VendorLook(
        difference=response_error(response, simulated),
        against_target=compare(frequency_hz, response, target, design.job.accept),
        follows=follows,
    )


def vendor_notices(look: VendorLook | None) -> tuple[str, ...]:
    """What the user must know of the model, one sentence each."""
    if look is None:
        return ()
    if look.failure is not None:
        return (f"nothing is known of the board with the vendor's op-amp model: {look.failure}",)
    missed = [c.name.partition(" ")[0] for c in look.against_target if not c.passed]
    if not missed:
        return ()
    kind = "limit" if len(missed) == 1 else "limits"
    return (
        f"with the vendor's op-amp model the board misses its {kind} of {' and '.join(missed)}; "
        "the verdict rests on the one-pole model with the figures of the job",
    )


def _follows(design: Design, simulator: Simulator) -> Check:
    """Whether the output of the model rises with its + input, everything else at rest."""
    model, (low, high) = design.job.board.vendor_model, design.job.board.supply
    assert model is not None
    limit = (high - low) / PARTS_OF_SUPPLY
    deck = follower_deck(model, supply=(low, high), drive=DRIVE)
    try:
        found = simulator.operating_point(deck, ["out_up", "out_down"])
    except SimulatorError as problem:
        return Check(FOLLOWS, limit, None, "V", False, _told(problem))
    rise = found["out_up"] - found["out_down"]
    drive = show(DRIVE, "V")
    note = f"rise as the + input goes from -{drive} to {drive}, the - input at ground"
    if rise <= -limit:
        note += "; it falls: plus and minus are exchanged in the job's pins"
    elif not rise >= limit:
        note += "; it hardly moves: look at the pins and at the model"
    return Check.at_least(FOLLOWS, rise, limit, "V", note)


def _told(problem: SimulatorError) -> str:
    """What ngspice says of a failure, each thing once; the message where it says nothing."""
    lines: list[str] = []
    for line in (" ".join(each.split()) for each in problem.log.splitlines()):
        if _STATE.match(line):
            break
        if line and not _BESIDE_THE_POINT.match(line) and line not in lines:
            lines.append(line)
    if not lines:
        return str(problem)
    joined = "; ".join(lines[:MOST_LINES]).replace(":;", ":")
    return f"ngspice failed: {joined}"
