"""The whole second opinion on a design, and what becomes of a simulator that fails."""

import math
from dataclasses import replace

import numpy as np
import pytest

from netlist.ngspice import Simulator
from netlist.stimulus import decks_of, step_duration
from netlist.verification import Verification, disagreement, verify
from synth.errors import SimulationFailedError, SimulationTimeoutError
from synth.evidence import response_error
from synth.nodal import compile_circuit
from synth.tolerance import run_boards
from synth.transfer import Factor, TransferFunction
from tests.circuits import figures, tow_thomas
from tests.netlist import boards

FIRST = Factor.real(-1000.0)


@pytest.fixture(scope="module")
def design():
    return boards.design()


@pytest.fixture(scope="module")
def verified(design, simulator):
    return verify(design, simulator=simulator)


def test_a_good_board_is_verified_with_both_checks(verified, design):
    assert verified.failure is None
    names = [
        "magnitude error",
        "phase error",
        "difference of the two analyses",
        "settling after a step",
        "clipping of the largest sine",
    ]
    assert [(c.name, c.passed) for c in verified.checks] == [(name, True) for name in names]
    low, high = design.job.signal.band_hz
    np.testing.assert_allclose(verified.frequency_hz[[0, -1]], [low, high], rtol=1e-12)
    expected = response_error(verified.simulated, design.wanted.response(verified.frequency_hz))
    np.testing.assert_array_equal(verified.error.magnitude_db, expected.magnitude_db)
    assert verified.checks[0].value == verified.error.largest_db


def test_ngspice_and_the_nodal_engine_agree(verified, design):
    assert 0 <= verified.nodal_disagreement < 1e-9
    density = compile_circuit(design.circuit).noise(verified.frequency_hz).power.sum(axis=1)
    total = math.sqrt(np.trapezoid(density, verified.frequency_hz))
    np.testing.assert_allclose(verified.noise_rms, total, rtol=1e-3)


@pytest.mark.parametrize("points_per_decade", [50, 333, 1000])
def test_total_noise_reaches_to_the_end_of_the_band(design, simulator, points_per_decade):
    """However the sweep divides the band, flat parts and all; against a fine quadrature."""
    low, high = design.job.signal.band_hz[0], 7777.0
    fine = np.geomspace(low, high, 3000)
    density = compile_circuit(design.circuit).noise(fine).power.sum(axis=1)
    expected = math.sqrt(np.trapezoid(density, fine))
    found = simulator.noise(decks_of(design).board, "out", low, high, points_per_decade)
    np.testing.assert_allclose(found.total_rms, expected, rtol=2e-4)
    assert (found.frequency_hz[0], found.frequency_hz[-1]) == (low, high)
    assert np.all(np.diff(found.frequency_hz) > 0)


def test_a_board_that_oscillates_does_not_pass(design, simulator):
    """Two integrators with op-amps too slow for the Q asked: Q / (1 - 4 Q f0 / GBW) is negative
    (methods of Tow-Thomas sections, to first order), which no frequency response shows."""
    w0, q = 1 / (10e3 * 1.59e-9), 60.0
    slow = tow_thomas(figures(gain_bandwidth=1e6), damping=q * 10e3)
    target = TransferFunction.from_factors(w0**2, (), [Factor.pair(w0, 0.7)])
    found = verify(replace(design, circuit=slow, wanted=target), simulator=simulator)
    check = next(c for c in found.checks if c.name == "settling after a step")
    assert not check.passed
    assert check.value > 5.0


def test_an_oscillation_that_outlasts_the_time_limit_is_told(design):
    with Simulator() as hurried:
        deck = endless(decks_of(design).step)
        with pytest.raises(SimulationTimeoutError, match=r"limit of 0.5 s .* oscillation"):
            hurried.transient(deck, ["out"], time_limit=0.5)


def endless(deck):
    """The deck with a run that is far too long."""
    words = next(line for line in deck.splitlines() if line.startswith(".tran"))
    step = words.split()[1]
    return deck.replace(words, f".tran 1.0 1000.0 0.0 {step}")


def test_every_net_rests_at_ground_and_the_step_settles_at_the_dc_gain(verified, design):
    nets = {net for net in design.circuit.connections if net != "0"}
    assert verified.operating_point.keys() == nets
    assert max(abs(v) for v in verified.operating_point.values()) < 1e-6
    assert {"in", "out", *design.circuit.signal_nets()} == verified.step.voltages.keys()
    peak = design.job.signal.input_peak
    dc = compile_circuit(design.circuit).solve([1e-3])[0].real
    np.testing.assert_allclose(verified.step.voltages["out"][-1], peak * dc, rtol=5e-3)


def test_a_wrong_part_fails_the_checks_but_not_the_agreement(design, simulator):
    part = design.circuit.passives[0]
    wrong = replace(design, circuit=design.circuit.with_values({part.ref: part.value * 1.5}))
    found = verify(wrong, simulator=simulator)
    assert not found.checks[0].passed
    assert found.nodal_disagreement < 1e-9


def test_without_a_library_the_failure_is_told_and_nothing_else(design, monkeypatch):
    monkeypatch.setattr("ctypes.util.find_library", lambda name: None)
    found = verify(design)
    assert "install libngspice0" in found.failure
    assert found.simulated is None
    assert found.checks == ()


def test_a_failure_after_the_response_keeps_the_response(design):
    class StepFails(Simulator):
        def transient(self, deck, nets, *, time_limit=None):
            raise SimulationFailedError("ngspice failed: timestep too small")

    with StepFails() as broken:
        found = verify(design, simulator=broken)
    assert found.failure == "ngspice failed: timestep too small"
    assert found.step is None
    assert found.noise_rms is not None
    assert [c.name for c in found.checks] == [
        "magnitude error",
        "phase error",
        "difference of the two analyses",
    ]


def test_a_verification_without_checks_needs_a_failure():
    with pytest.raises(ValueError, match="neither checks nor a failure"):
        Verification()


def test_disagreement_is_relative_until_a_millionth_of_the_largest():
    h = np.array([1.0, 1e-3, 1e-9], dtype=complex)
    assert disagreement(h, h) == 0
    np.testing.assert_allclose(disagreement(h + np.array([0, 1e-5, 0]), h), 1e-2, rtol=1e-9)
    np.testing.assert_allclose(disagreement(h + np.array([0, 0, 1e-9]), h), 1e-3, rtol=1e-9)


def test_the_decks_are_those_of_the_band_and_the_rails(design):
    decks = decks_of(design)
    low, high = design.job.signal.band_hz
    assert f".ac dec 67 {low!r} {high!r}\n" in decks.board
    assert "saturates at -10.5 V and 10.5 V" in decks.step
    assert decks == decks_of(design)


def test_a_long_ringing_is_followed_to_its_end(design, simulator):
    """A resonance of Q = 20 near 1 kHz: with a fast op-amp the step response is
    1 - exp(-at) (cos bt + a/b sin bt)."""
    w0, q = 1 / (10e3 * 15.9e-9), 20.0
    circuit = tow_thomas(figures(gain_bandwidth=1e9), C=15.9e-9, damping=q * 10e3)
    target = TransferFunction.from_factors(w0**2, (), [Factor.pair(w0, q)])
    found = verify(replace(design, circuit=circuit, wanted=target), simulator=simulator)
    decks = decks_of(replace(design, circuit=circuit, wanted=target))
    start, end = (float(t) for t in decks.step.split("PWL(")[1].split()[2:5:2])
    t = np.maximum(found.step.time_s - (start + end) / 2, 0.0)
    a = w0 / (2 * q)
    b = math.sqrt(w0**2 - a**2)
    peak = design.job.signal.input_peak
    expected = peak * (1 - np.exp(-a * t) * (np.cos(b * t) + a / b * np.sin(b * t)))
    np.testing.assert_allclose(found.step.voltages["out"], expected, rtol=0, atol=0.02 * peak)


@pytest.mark.parametrize(
    ("zeros", "poles", "gain", "expected"),
    [
        # Settled to 0.1 %: seven time constants of the slowest pole.
        ([], [FIRST, Factor.real(-1e5)], 1e8, 7e-3),
        # Four equal ones take longer: 1 - exp(-t) (1 + t + t^2/2 + t^3/6) = 0.999 at t = 13.06.
        ([], [FIRST] * 4, 1e12, 13.06e-3),
        # An integrator 100/s: 5 V from 1 V after 50 ms, and a fifth more.
        ([FIRST], [Factor.real(0.0), Factor.real(-1e4)], 1e3, 60e-3),
        # Two poles at the origin: 1e6 t^2/2 = 5 V.
        ([], [Factor.real(0.0), Factor.real(0.0)], 1e6, 3.8e-3),
        # A growing pole: ten time constants.
        ([], [Factor.real(500.0)], 1.0, 20e-3),
        # Undamped: five time constants of the band's lower edge.
        ([], [Factor.pair(100.0, math.inf)], 1.0, 0.8),
        # 60 periods of the fastest resonance at most.
        ([], [Factor.pair(2 * math.pi * 1e4, 5.0), Factor.real(-1.0)], 1.0, 6.1e-3),
    ],
)
def test_the_length_of_the_step_response(zeros, poles, gain, expected):
    target = TransferFunction.from_factors(gain, zeros, poles)
    stop = step_duration(target, band_hz=(1.0, 1e4), step_volts=1.0, swing_limit=5.0)
    np.testing.assert_allclose(stop, expected, rtol=0.03)


@pytest.fixture(scope="module")
def toleranced(design):
    """The design with a real run of boards in place of an invented one."""
    run = run_boards(
        compile_circuit(design.circuit),
        design.circuit,
        design.wanted.response(design.frequency_hz),
        design.frequency_hz,
        accept=design.job.accept,
        boards=60,
        seed=4,
    )
    return replace(design, tolerance=run)


def test_the_worst_boards_are_simulated_too(toleranced, simulator):
    """A deck written anew for each of them gives what the altered deck gave, and the nodal
    engine agrees."""
    found = verify(toleranced, simulator=simulator)
    check = found.checks[3]
    assert check.name == "difference on the worst boards"
    assert check.passed
    assert "5 of 60 boards" in check.note
    assert check.value == 1e6 * found.worst_disagreement
    refs = [p.ref for p in toleranced.circuit.passives]
    anew = []
    for board in toleranced.tolerance.worst:
        circuit = toleranced.circuit.with_values(dict(zip(refs, board.values, strict=True)))
        swept = simulator.ac(decks_of(replace(toleranced, circuit=circuit)).board, ["out"])
        nodal = compile_circuit(circuit).solve(swept.frequency_hz)
        anew.append(disagreement(swept.voltages["out"], nodal))
        share = response_error(nodal, toleranced.wanted.response(swept.frequency_hz)).largest_db
        assert share / toleranced.job.accept.magnitude_db <= board.limit_share * 1.02
    np.testing.assert_allclose(found.worst_disagreement, max(anew), rtol=1e-2, atol=1e-10)


def test_worst_boards_are_simulated_with_the_op_amps_they_have(toleranced, simulator):
    """Op-amps of half and twice their figure move the response by far more than the analyses may
    differ, and both follow."""
    amplifiers = toleranced.circuit.amplifiers
    worst = tuple(
        replace(board, gain_bandwidth=tuple(factor * a.figures.gain_bandwidth for a in amplifiers))
        for board, factor in zip(toleranced.tolerance.worst, (0.5, 0.7, 1.0, 1.4, 2.0), strict=True)
    )
    spread = replace(toleranced, tolerance=replace(toleranced.tolerance, worst=worst))
    check = verify(spread, simulator=simulator).checks[3]
    assert (check.name, check.passed) == ("difference on the worst boards", True)
    program = compile_circuit(toleranced.circuit)
    frequency = toleranced.frequency_hz
    slow = program.solve(frequency, values=worst[0].values, gain_bandwidth=worst[0].gain_bandwidth)
    assert disagreement(slow, program.solve(frequency, values=worst[0].values)) > 1e-4


def test_a_simulator_that_disagrees_on_one_board_alone_fails_the_check(toleranced):
    class OneOff(Simulator):
        def alter_ac(self, deck, changes, net):
            found = super().alter_ac(deck, changes, net)
            found[2] *= 1 + 3e-6
            return found

    with OneOff() as wrong:
        found = verify(toleranced, simulator=wrong)
    assert [c.passed for c in found.checks[2:4]] == [True, False]
    number = toleranced.tolerance.worst[2].number + 1
    assert found.checks[3].note.endswith(f"largest on number {number}")
    np.testing.assert_allclose(found.checks[3].value, 3.0, rtol=1e-3)
