"""What is said of frequencies between the judged ones: against dense sweeps of bad boards."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.evidence import response_error
from synth.nodal import compile_circuit
from synth.tolerance import drawn_values
from synth.transfer import Factor, TransferFunction
from synth.worstcase import worst_case
from synth.worstcase.between import Cover
from synth.worstcase.expansion import Parts
from tests.jobs import job_for
from tests.strategies import butterworth

W0 = 2 * np.pi * 1e3
SHARP = TransferFunction.from_factors(W0**2, [], [Factor.pair(W0, 8)])
NOTCHED = TransferFunction.from_factors(
    1, [Factor.pair(1.2 * W0, 5)], [Factor.pair(W0, 3), Factor.real(-W0 / 4)]
)


def board(target, form, resistors, capacitors):
    grid = np.geomspace(500, 2e3, 60)
    circuit = sketch_form(job_for(target, (500.0, 2e3)), form, grid).circuit
    grades = {"resistor": resistors, "capacitor": capacitors}
    passives = tuple(replace(p, grade=grades[p.kind]) for p in circuit.passives)
    return replace(circuit, passives=passives)


@pytest.mark.parametrize(
    ("target", "form"),
    [
        (SHARP, "tow_thomas"),
        (SHARP, "controllable"),
        (NOTCHED, "cascade"),
        (NOTCHED, "controllable"),
    ],
)
@pytest.mark.parametrize("tolerance", [(0.001, 0.001), (0.01, 0.05)])
def test_no_board_passes_the_bound_between_sparse_frequencies(target, form, tolerance):
    """Nine frequencies across a resonance: between them boards pass the bound at them, which
    shows that the wider one is needed."""
    circuit = board(target, form, *tolerance)
    frequency = np.geomspace(600, 1700, 9)
    found = worst_case(
        circuit, target.response(frequency), frequency, target=target, work=3_000_000
    )
    fine = np.geomspace(frequency[0], frequency[-1], 400)
    drawn = drawn_values(circuit, 300, 3)
    nominal = np.array([p.value for p in circuit.passives])
    spread = np.array([p.tolerance for p in circuit.passives])
    signs = np.random.default_rng(4).choice([-1.0, 1.0], drawn.shape)
    # The boards that are worst somewhere in between, found there by a search of its own.
    between = worst_case(circuit, target.response(fine), fine, work=0)
    named = [
        [error.values[p.ref] for p in circuit.passives]
        for error in (found.magnitude_db, found.phase_deg, between.magnitude_db, between.phase_deg)
    ]
    boards = np.vstack([drawn, nominal * (1 + spread * signs), np.array(named)])
    responses = compile_circuit(circuit).solve(fine, values=boards)
    error = response_error(responses, target.response(fine))
    passed = 0
    for one, sizes in (
        (found.magnitude_db, np.abs(error.magnitude_db)),
        (found.phase_deg, np.abs(error.phase_deg)),
    ):
        assert one.bound <= one.everywhere
        assert sizes.max() <= one.everywhere
        passed += sizes.max() > one.bound
        # And it is not idle: some board comes near, where the work is enough for so sparse a grid.
        if target is SHARP:
            assert one.everywhere <= 1.2 * sizes.max()
    assert passed


def test_on_a_dense_grid_the_whole_band_costs_little():
    target = butterworth(4, 1e3)
    circuit = board(target, "cascade", 0.01, 0.05)
    frequency = np.geomspace(600, 1700, 60)
    found = worst_case(circuit, target.response(frequency), frequency, target=target)
    for error in (found.magnitude_db, found.phase_deg):
        assert error.bound <= error.everywhere <= 1.05 * error.reached


def test_without_a_target_nothing_is_said_of_the_whole_band():
    circuit = board(SHARP, "tow_thomas", 0.01, 0.01)
    frequency = np.geomspace(600, 1700, 9)
    found = worst_case(circuit, SHARP.response(frequency), frequency)
    assert found.magnitude_db.everywhere is None


def test_a_zero_of_the_target_inside_the_band_leaves_no_bound():
    target = TransferFunction.from_factors(
        1, [Factor.pair(W0, float("inf"))], [Factor.pair(W0, 0.7)]
    )
    circuit = board(target, "cascade", 0.01, 0.01)
    frequency = np.array([600.0, 800.0, 1300.0, 1700.0])
    found = worst_case(circuit, target.response(frequency), frequency, target=target)
    assert found.magnitude_db.bound is not None
    assert found.magnitude_db.everywhere is None


def test_frequency_moves_the_appended_variables():
    """The slope of ln H over ln omega is the sum over what grows with it."""
    circuit = board(NOTCHED, "khn", 0.01, 0.05)
    parts = Parts.of(circuit)
    s = 2j * np.pi * np.array([700.0, 1e3, 1300.0])
    multiples = np.random.default_rng(1).uniform(*parts.box, (3, parts.active.size))
    found = parts.expand(s, multiples, frequency=True)
    slope = np.diagonal(found.numerator - found.denominator, axis1=1, axis2=2)
    step = 1e-5
    up, down = (parts.response(s * np.exp(k * step), multiples) for k in (1, -1))
    np.testing.assert_allclose(
        slope[:, parts.with_frequency].sum(axis=1), np.log(up / down) / (2 * step), rtol=1e-6
    )


def test_slopes_of_the_target_follow_its_roots():
    omega = 2 * np.pi * np.array([700.0, 1e3, 1300.0])
    parts = Parts.of(board(NOTCHED, "cascade", 0.01, 0.05))
    cover = Cover.of(parts, NOTCHED, omega)
    first, second, third = cover._target_slopes(omega, np.zeros(3))

    def ln(u):
        return np.log(NOTCHED.response(omega * np.exp(u) / (2 * np.pi)))

    h = 1e-3
    np.testing.assert_allclose(first, (ln(h) - ln(-h)) / (2 * h), rtol=1e-4)
    np.testing.assert_allclose(second, (ln(h) + ln(-h) - 2 * ln(0.0)) / h**2, rtol=1e-3, atol=1e-3)
    exact = (ln(2 * h) - 2 * ln(h) + 2 * ln(-h) - ln(-2 * h)) / (2 * h**3)
    assert np.all(np.abs(exact) <= third * (1 + 1e-3))
