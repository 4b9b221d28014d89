"""Boards within tolerance on which a response grows without limit or vanishes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.circuit import Circuit
from synth.grid import judging_frequencies
from synth.nodal import compile_circuit
from synth.transfer import Factor, TransferFunction
from synth.worstcase import WorstError, worst_case
from synth.worstcase.boxes import Start
from synth.worstcase.expansion import Parts
from synth.worstcase.vanishing import find_vanishing
from tests.jobs import job_for

W0 = 2 * np.pi * 1e3
BAND = (300.0, 3e3)


def high_q(*, notch: bool = False) -> TransferFunction:
    """Two sharp pairs next to each other; with a shallow notch between them."""
    poles = [Factor.pair(0.97 * W0, 12), Factor.pair(1.03 * W0, 15)]
    zeros = [Factor.pair(W0, 20)] if notch else []
    gain = W0**2 if notch else W0**4 / 100
    return TransferFunction.from_factors(gain, zeros, poles)


def board(target: TransferFunction, form: str, tolerance: float) -> tuple[Circuit, np.ndarray]:
    """The form with ideal values and one tolerance for all parts."""
    frequency = judging_frequencies(target, BAND)[::6]
    circuit = sketch_form(job_for(target, BAND), form, frequency).circuit
    passives = tuple(replace(p, grade=tolerance) for p in circuit.passives)
    return replace(circuit, passives=passives), frequency


@pytest.mark.parametrize(
    ("form", "target", "what"),
    [("controllable", high_q(), "pole"), ("parallel", high_q(notch=True), "zero")],
    ids=["pole", "zero"],
)
def test_a_board_without_limit_is_found_and_shown(form, target, what):
    """The nodal engine agrees: on that board H is huge, or next to nothing; around it H takes
    every phase."""
    circuit, frequency = board(target, form, 0.05)
    wanted = compile_circuit(circuit).solve(frequency)
    parts = Parts.of(circuit)
    start = Start.of(parts, 2j * np.pi * frequency)
    found = find_vanishing(start, wanted)
    assert found.what == what
    at = frequency[found.place : found.place + 1]
    reference = wanted[found.place]
    low, high = parts.box
    assert np.all((found.board > low) & (found.board < high))

    def ratio(multiples):
        values = parts.values(np.atleast_2d(multiples))
        return compile_circuit(circuit).solve(at, values=values)[:, 0] / reference

    size = abs(ratio(found.board)[0])
    assert size > 1e5 if what == "pole" else size < 1e-5
    # Once around the board with the two parts, H turns once around as well.
    turn = np.exp(2j * np.pi * np.linspace(0, 1, 200))
    around = np.tile(found.board, (turn.size, 1))
    i, j = found.parts
    room = np.minimum(high - found.board, found.board - low) / 10
    around[:, i] += room[i] * turn.real
    around[:, j] += room[j] * turn.imag
    phase = np.unwrap(np.angle(ratio(around)))
    assert abs(phase[-1] - phase[0]) == pytest.approx(2 * np.pi, rel=1e-6)
    opposite = ratio(found.opposite)[0]
    assert abs(np.angle(opposite)) == pytest.approx(np.pi, abs=1e-3)
    worst = worst_case(circuit, wanted, frequency, target=target)
    assert (worst.magnitude_db.unlimited, worst.magnitude_db.bound) == (what, None)
    assert worst.magnitude_db.everywhere is None
    assert not worst.magnitude_db.meets
    assert worst.phase_deg.reached == pytest.approx(180, abs=0.1)
    assert worst.phase_deg.bound == pytest.approx(180, abs=0.1)


@pytest.mark.parametrize("form", ["controllable", "cascade"])
def test_nothing_is_shown_where_a_bound_exists(form):
    circuit, frequency = board(high_q(), form, 0.001)
    wanted = compile_circuit(circuit).solve(frequency)
    start = Start.of(Parts.of(circuit), 2j * np.pi * frequency)
    assert find_vanishing(start, wanted, range(0, frequency.size, 10)) is None
    found = worst_case(circuit, wanted, frequency)
    assert found.magnitude_db.meets


def test_no_limit_and_a_bound_exclude_each_other():
    ends = {"low": (), "high": (), "between": ()}
    common = {"unit": "dB", "reached": 1.0, "sign": 1, "frequency_hz": 1.0, "values": {}}
    assert not WorstError(bound=None, unlimited="pole", **common, **ends).meets
    with pytest.raises(ValueError, match="expected one"):
        WorstError(bound=2.0, unlimited="pole", **common, **ends)
