"""Norms of state-space systems against published values, closed forms and a second library."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
import scipy.signal

from synth.errors import NumericalError
from synth.forms import realize
from synth.peaks import signal_peaks
from synth.statespace import StateSpace
from synth.transfer import Factor, TransferFunction
from tests.strategies import butterworth


def low_pass(q: float, w0: float = 1.0) -> StateSpace:
    """w0^2 / (s^2 + w0/q s + w0^2)."""
    A = np.array([[0.0, w0], [-w0, -w0 / q]])
    return StateSpace(A, np.array([0.0, w0]), np.array([[1.0, 0.0]]), np.zeros(1))


@pytest.mark.parametrize("q", [0.7071067811865476, 2.0, 30.0])
@pytest.mark.parametrize("w0", [1.0, 6e4])
def test_second_order_norms_are_the_closed_forms(q: float, w0: float) -> None:
    """L2^2 = w0 Q / 2 and L1 = coth(pi zeta / (2 sqrt(1 - zeta^2))) (algebra, recomputed)."""
    system = low_pass(q, w0)
    zeta = 1 / (2 * q)
    l1 = 1 / math.tanh(math.pi * zeta / (2 * math.sqrt(1 - zeta**2)))
    assert system.l2_norms()[0] ** 2 == pytest.approx(w0 * q / 2, rel=1e-10)
    assert system.l1_norms()[0] == pytest.approx(l1, rel=2e-6)


def test_published_values_of_the_second_order_norms() -> None:
    """Recomputed reference values: L1 2.599351 at Q = 2, 1.090331 at Q = 0.7071; Linf 2.065591."""
    assert low_pass(2.0).l1_norms()[0] == pytest.approx(2.599351, abs=1e-6)
    assert low_pass(0.7071).l1_norms()[0] == pytest.approx(1.090331, abs=6e-6)
    target = TransferFunction.from_factors(1, [], [Factor.pair(1, 2)])
    peaks = signal_peaks(realize(target, "controllable"), target, band_hz=(0.01, 1.0), swing="sine")
    assert peaks.peak["x1"] == pytest.approx(2.065591, abs=1e-6)


def test_hankel_singular_values() -> None:
    """1/(s+2): 0.25; Butterworth of order 3: 0.793128, 0.344030, 0.050901 (recomputed
    reference values), and the Gramians of python-control's Lyapunov solver (its hsvd needs a
    library that is not installed)."""
    one = StateSpace(np.array([[-2.0]]), np.ones(1), np.ones((1, 1)), np.zeros(1))
    np.testing.assert_allclose(one.hankel_singular_values(), [0.25], rtol=1e-12)
    target = TransferFunction.from_polynomials([1], [1, 2, 2, 1])
    graph = realize(target, "controllable")
    found = StateSpace.of_signals(graph, (graph.output,)).hankel_singular_values()
    np.testing.assert_allclose(found, [0.793128, 0.344030, 0.050901], atol=1e-6)
    theirs = control.ss(control.tf([1], [1, 2, 2, 1]))
    P = control.lyap(theirs.A, theirs.B @ theirs.B.T, method="scipy")
    Q = control.lyap(theirs.A.T, theirs.C.T @ theirs.C, method="scipy")
    values = np.sqrt(np.sort(np.linalg.eigvals(P @ Q).real)[::-1])
    np.testing.assert_allclose(found, values, rtol=1e-8)


def test_gramians_agree_with_an_integral_of_the_impulse_response() -> None:
    """The L2 norm squared is the integral of the squared impulse response (scipy)."""
    num, den = [1.0, 3.0], [1.0, 2.0, 5.0, 1.0]
    graph = realize(TransferFunction.from_polynomials(num, den), "observable")
    system = StateSpace.of_signals(graph, (graph.output,))
    t = np.linspace(0, 80, 400_001)
    _, impulse = scipy.signal.impulse((num, den), T=t)
    energy = np.trapezoid(impulse**2, t)
    assert system.l2_norms()[0] ** 2 == pytest.approx(energy, rel=1e-5)
    assert system.l1_norms()[0] == pytest.approx(np.trapezoid(np.abs(impulse), t), rel=1e-5)


def test_l1_norm_of_widely_spread_poles_is_right() -> None:
    """A slow, a fast and a ringing mode six decades apart: the sum of their own norms bounds
    it, and with alternating residues of one sign it is the DC gain."""
    target = TransferFunction.from_factors(
        1, [], [Factor.real(-1.0), Factor.real(-1e3), Factor.real(-1e6)]
    )
    graph = realize(target, "cascade")
    system = StateSpace.of_signals(graph, (graph.output,))
    assert system.l1_norms()[0] == pytest.approx(1e-9, rel=1e-6)


def test_time_domain_norms_of_an_integrator_are_refused() -> None:
    """A pole at the origin has no L1 norm."""
    system = StateSpace(np.zeros((1, 1)), np.ones(1), np.ones((1, 1)), np.zeros(1))
    with pytest.raises(NumericalError, match="left half-plane"):
        system.l1_norms()


def test_linf_is_found_between_the_points_of_any_grid() -> None:
    """The peak of a pair with Q = 40: Q / sqrt(1 - 1/(4 Q^2)), whatever its frequency."""
    q = 40.0
    for f0 in (3.3, 777.7, 12345.6):
        target = TransferFunction.from_factors(
            (2 * math.pi * f0) ** 2, [], [Factor.pair(2 * math.pi * f0, q)]
        )
        peaks = signal_peaks(realize(target, "cascade"), target, band_hz=(1, 1e5), swing="sine")
        peak = peaks.peak[realize(target, "cascade").output]
        assert peak == pytest.approx(q / math.sqrt(1 - 1 / (4 * q * q)), rel=1e-6)


def test_peaks_of_a_butterworth_output_are_its_dc_gain() -> None:
    """A maximally flat response never exceeds 1."""
    target = butterworth(5, 1e3)
    graph = realize(target, "cascade")
    peaks = signal_peaks(graph, target, band_hz=(100, 2e3), swing="sine")
    assert peaks.peak[graph.output] == pytest.approx(1.0, rel=1e-9)


@pytest.mark.parametrize("q", [2.0, 100.0])
def test_the_rate_is_found_at_a_sharp_peak_in_a_wide_band(q: float) -> None:
    """The largest 2 pi f |G| of every block, against a sweep far denser than the resonance."""
    f0 = 777.7
    w0 = 2 * math.pi * f0
    target = TransferFunction.from_factors(w0 / q, [Factor.real(0)], [Factor.pair(w0, q)])
    graph = realize(target, "cascade")
    band = (1.0, 1e6)
    peaks = signal_peaks(graph, target, band_hz=band, swing="sine")
    dense = np.union1d(np.geomspace(*band, 4001), f0 * np.linspace(0.9, 1.1, 20_001))
    signals = graph.signals(2j * np.pi * dense)
    for name, rate in peaks.rate.items():
        assert rate == pytest.approx(np.max(2 * np.pi * dense * np.abs(signals[name])), rel=2e-3)


def test_peak_and_rate_stop_beside_a_pole_on_the_axis_alike() -> None:
    """An undamped pair has no largest value: both are those 1 % beside it, whatever the band."""
    w0 = 2 * math.pi * 100.0
    target = TransferFunction.from_factors(w0**2, [], [Factor.pair(w0, math.inf)])
    graph = realize(target, "controllable")
    for low in (50.0, 99.0, 99.99):
        peaks = signal_peaks(graph, target, band_hz=(low, 1e3), swing="sine")
        assert peaks.peak[graph.output] == pytest.approx(1 / (1 - 0.99**2), rel=1e-6)
        rate = 1.01 * w0 / (1.01**2 - 1)
        assert peaks.rate[graph.output] == pytest.approx(rate, rel=1e-6)


def test_the_direct_path_counts_in_the_l1_norm() -> None:
    """(s + 3)/(s + 1) = 1 + 2/(s + 1): 1 + 2; and 1 - 2/(s + 1), an all-pass, has 3 too."""
    for zero in (-3.0, 1.0):
        target = TransferFunction.from_factors(1, [Factor.real(zero)], [Factor.real(-1.0)])
        graph = realize(target, "controllable")
        system = StateSpace.of_signals(graph, (graph.output,))
        assert system.l1_norms()[0] == pytest.approx(3.0, rel=1e-6)


def test_l1_norm_is_reached_by_the_worst_input() -> None:
    """The input that follows the sign of the impulse response turned about drives the output
    to the norm (scipy's lsim), and no random switching input passes it."""
    num, den = [0.4, 3.0, 1.0], [1.0, 0.8, 9.0, 2.0]
    graph = realize(TransferFunction.from_polynomials(num, den), "cascade")
    norm = StateSpace.of_signals(graph, (graph.output,)).l1_norms()[0]
    t = np.linspace(0, 60, 60_001)
    _, impulse = scipy.signal.impulse((num, den), T=t)
    _, y, _ = scipy.signal.lsim((num, den), np.sign(impulse[::-1]), t, interp=False)
    assert y[-1] == pytest.approx(norm, rel=2e-3)
    rng = np.random.default_rng(4)
    for _ in range(5):
        u = np.repeat(rng.choice([-1.0, 1.0], 601), 100)[: t.size]
        _, y, _ = scipy.signal.lsim((num, den), u, t, interp=False)
        assert np.max(np.abs(y)) < norm
