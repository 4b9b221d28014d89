"""The exact local form of ln H, the bounds over boxes, and the groups of a cascade."""

from __future__ import annotations

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.grid import judging_frequencies
from synth.nodal import compile_circuit
from synth.worstcase.ascent import climb, follow
from synth.worstcase.enclosure import enclose
from synth.worstcase.expansion import Parts
from synth.worstcase.groups import independent_groups
from tests.circuits import figures, multiple_feedback, rc, tow_thomas
from tests.jobs import job_for
from tests.strategies import butterworth

CIRCUITS = {
    "rc": rc(),
    "multiple feedback": multiple_feedback(figures()),
    "Tow-Thomas": tow_thomas(figures()),
    "Tow-Thomas, Q = 10": tow_thomas(figures(), damping=100e3),
}
FREQUENCY = np.array([3e3, 9e3, 1e4, 1.1e4, 4e4])
S = 2j * np.pi * FREQUENCY


@pytest.fixture(params=CIRCUITS)
def circuit(request):
    return CIRCUITS[request.param]


def middle(parts: Parts):
    low, high = parts.box
    return (low + high) / 2, (high - low) / (high + low)


def responses(circuit, parts, multiples):
    """H of many boards at every frequency by the nodal engine, shape (boards, F)."""
    return compile_circuit(circuit).solve(FREQUENCY, values=parts.values(multiples))


def test_two_determinants_give_the_response_of_any_board(circuit):
    parts = Parts.of(circuit)
    centre, tau = middle(parts)
    found = parts.expand(S, np.tile(centre, (S.size, 1)))
    delta = tau * np.random.default_rng(1).uniform(-1, 1, (20, tau.size))
    exact = responses(circuit, parts, centre * (1 + delta))
    identity = np.eye(tau.size)
    for board, one in zip(exact, delta, strict=True):
        ratio = np.linalg.det(identity + found.numerator * one) / np.linalg.det(
            identity + found.denominator * one
        )
        np.testing.assert_allclose(found.response * ratio, board, rtol=1e-9)


def test_parts_that_vary_as_one_cover_every_value_of_their_ratio():
    """R4 and C2 of the second integrator, R5 and R6 of the inverter: their ratio alone counts."""
    circuit = CIRCUITS["Tow-Thomas"]
    parts = Parts.of(circuit)
    refs = circuit.by_ref
    assert parts.active.size == len(refs) - 2
    low, high = parts.box
    for multiples, r4, c2 in ((low, 1.01, 1.05), (high, 0.99, 0.95)):
        values = dict(zip(refs, parts.values(multiples), strict=True))
        assert values["R4"] == pytest.approx(r4 * refs["R4"].value, rel=1e-12)
        assert values["C2"] == pytest.approx(c2 * refs["C2"].value, rel=1e-12)
    one = np.array([1j * 6e4])
    for multiples in (low, high):
        expanded = parts.expand(one, multiples[None]).response
        np.testing.assert_allclose(expanded, parts.response(one, multiples[None]), rtol=1e-10)
    inside = np.random.default_rng(0).uniform(low, high, (50, low.size))
    tolerance = np.array([p.tolerance for p in circuit.passives])
    off = np.abs(parts.values(inside) / parts.structure.values - 1)
    assert np.all(off <= tolerance * (1 + 1e-12))


def test_slopes_are_the_sensitivities_of_the_nodal_engine(circuit):
    parts = Parts.of(circuit)
    found = parts.expand(S, np.ones((S.size, parts.active.size)))
    slope = np.diagonal(found.numerator - found.denominator, axis1=1, axis2=2)
    exact = compile_circuit(circuit).sensitivities(FREQUENCY).passives[:, parts.active]
    sign = np.where(parts.structure.is_resistor[parts.active], -1.0, 1.0)
    np.testing.assert_allclose(slope, sign * exact, rtol=1e-8, atol=1e-10)


@pytest.mark.parametrize("direction", [1.0, -1.0, 1j, -1j])
@pytest.mark.parametrize("share", [1.0, 0.3, 0.05])
def test_no_board_of_a_box_passes_its_bound(circuit, direction, share):
    """Corners and boards inside, of the whole box and of parts of it; nor does the error turn
    where its slope was said to have one sign."""
    parts = Parts.of(circuit)
    centre, tau = middle(parts)
    tau = tau * share
    expansion = parts.expand(S, np.tile(centre, (S.size, 1)))
    target = responses(circuit, parts, np.ones((1, tau.size)))[0]
    generator = np.random.default_rng(3)
    inside = generator.uniform(-1, 1, (600, tau.size))
    inside[:300] = np.sign(inside[:300])
    ratio = responses(circuit, parts, centre * (1 + tau * inside)) / target
    error = (direction * np.log(ratio)).real
    wide = np.tile(tau, (S.size, 1))
    for cubic, strong in ((False, 0), (True, 3), (True, 12)):
        found = enclose(
            expansion, target, np.full(S.size, direction), wide, cubic=cubic, strong=strong
        )
        assert np.all(error.max(axis=0) <= found.bound)
        assert np.all(found.centre <= found.bound)
        for k, rises in zip(*np.nonzero(found.slope), strict=True):
            moved = inside.copy()
            moved[:, rises] = found.slope[k, rises]
            best = responses(circuit, parts, centre * (1 + tau * moved))[:, k] / target[k]
            assert np.all((direction * np.log(best)).real >= error[:, k] - 1e-12)
    if share == 0.05:
        gap = found.bound - error.max(axis=0)
        assert np.all(gap <= 0.2 * np.abs(error.max(axis=0) - found.centre) + 1e-9)


def test_a_resonance_that_sweeps_past_is_bounded_without_a_series():
    """Q = 10 with f0 off by 12 %: the series diverges, the corners bound it within a tenth."""
    circuit = CIRCUITS["Tow-Thomas, Q = 10"]
    parts = Parts.of(circuit)
    centre, tau = middle(parts)
    expansion = parts.expand(S[2:3], centre[None])
    one = np.array([1.0 + 0j])
    open_ended = enclose(expansion, expansion.response, one, tau[None])
    bounded = enclose(expansion, expansion.response, one, tau[None], strong=12)
    assert np.isinf(open_ended.bound[0])
    error, _ = climb(parts, S[2:3], expansion.response, one, centre[None])
    assert error[0] <= bounded.bound[0] <= 1.1 * error[0] + 0.1
    # The worst corner is a board, and what is said of it is its error.
    board = centre * (1 + tau * bounded.corner[0])
    there = np.log(parts.response(S[2:3], board[None]) / expansion.response)[0].real
    np.testing.assert_allclose(bounded.best, there, rtol=1e-9)


@pytest.mark.parametrize("method", [climb, follow])
def test_climbing_never_goes_down_and_stays_in_the_box(circuit, method):
    parts = Parts.of(circuit)
    low, high = parts.box
    start = np.random.default_rng(2).uniform(low, high, (S.size, low.size))
    target = responses(circuit, parts, np.ones((1, low.size)))[0]
    before = np.array([responses(circuit, parts, b[None])[0, k] for k, b in enumerate(start)])
    for direction in (1.0, -1.0, 1j, -1j):
        c = np.full(S.size, direction, dtype=complex)
        error, boards = method(parts, S, target, c, start)
        assert np.all(error >= (direction * np.log(before / target)).real - 1e-12)
        assert np.all((boards >= low) & (boards <= high))
        after = np.array([responses(circuit, parts, b[None])[0, k] for k, b in enumerate(boards)])
        np.testing.assert_allclose(error, (direction * np.log(after / target)).real, atol=1e-9)


def test_sections_of_a_cascade_are_groups_and_a_companion_form_is_one():
    target, band = butterworth(4, 1e3), (100.0, 2e3)
    frequency = judging_frequencies(target, band)[::20]

    def groups(form):
        circuit = sketch_form(job_for(target, band), form, frequency).circuit
        parts = Parts.of(circuit)
        ones = np.ones((frequency.size, parts.active.size))
        expansion = parts.expand(2j * np.pi * frequency, ones)
        found = independent_groups(expansion)
        assert sorted(np.concatenate(found)) == list(range(parts.active.size))
        return parts, found

    parts, found = groups("cascade")
    assert len(found) == 2
    # ln H of a board is the sum over groups of what each moves alone.
    low, high = parts.box
    board = np.random.default_rng(4).uniform(low, high)
    s = 2j * np.pi * frequency[-1:]
    base = parts.response(s, np.ones((1, low.size)))
    alone = [np.where(np.isin(np.arange(low.size), g), board, 1.0) for g in found]
    moved = [np.log(parts.response(s, one[None]) / base) for one in alone]
    whole = np.log(parts.response(s, board[None]) / base)
    np.testing.assert_allclose(sum(moved), whole, rtol=1e-9)
    assert len(groups("controllable")[1]) == 1
