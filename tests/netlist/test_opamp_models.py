"""The op-amp models in ngspice against published circuits and closed formulas."""

import math

import numpy as np
import pytest

from netlist.deck import board_deck, step_deck
from synth.circuit import Circuit
from synth.constants import BOLTZMANN, TEMPERATURE
from synth.grid import band_grid
from tests.circuits import (
    amplifier,
    amplifier_of_gain,
    figures,
    follower,
    integrator,
    leaky_integrator,
    multiple_feedback,
    near_ideal,
    part,
    rc,
    state_variable,
    tow_thomas,
)

THERMAL = 4 * BOLTZMANN * TEMPERATURE


def response(simulator, circuit, start_hz, stop_hz, points_per_decade=50):
    deck = board_deck(
        circuit, title="t", start_hz=start_hz, stop_hz=stop_hz, points_per_decade=points_per_decade
    )
    found = simulator.ac(deck, ["out"])
    return found.frequency_hz, found.voltages["out"]


def density(simulator, circuit, at_hz):
    deck = board_deck(circuit, title="t", start_hz=at_hz / 10, stop_hz=at_hz, points_per_decade=10)
    return simulator.noise(deck, "out", at_hz / 10, at_hz, 10).density[-1]


def step(simulator, circuit, nets=("out",), **settings):
    deck = step_deck(circuit, title="t", supply=(-12.0, 12.0), **settings)
    return simulator.transient(deck, list(nets))


def pair_of(frequency_hz, h, dc):
    """Frequency [Hz] and Q of a second-order low-pass: where its phase is -90 degrees from that
    at DC, |H| is Q times that at DC."""
    lag = -np.degrees(np.unwrap(np.angle(h / dc)))
    f0 = np.exp(np.interp(90.0, lag, np.log(frequency_hz)))
    return f0, np.interp(f0, frequency_hz, np.abs(h)) / abs(dc)


def test_the_sweep_is_the_grid_of_the_program_to_the_last_bit(simulator):
    """Bands whose decimals SPICE reads a last bit off included."""
    for band, points in (((0.3, 3e4), 50), ((1.0, 2e4), 50), ((4.447411948880624, 4447.4), 61)):
        frequency, _ = response(simulator, rc(), *band, points)
        np.testing.assert_array_equal(frequency, band_grid(band, points))


def test_multiple_feedback_low_pass(simulator):
    """R1 = R2 = 3k3, R3 = 2k2, C1 = 100 n, C2 = 22 n: 1259.33 Hz, Q 0.74605, H0 = -1 (from the
    design formulas of the section, computed by hand)."""
    frequency, h = response(simulator, multiple_feedback(near_ideal()), 1.0, 1e4, 500)
    f0, q = pair_of(frequency, h, -1.0)
    np.testing.assert_allclose(h[0], -1.0, rtol=2e-3)
    np.testing.assert_allclose([f0, q], [1259.33, 0.74605], rtol=5e-5, atol=0)


def test_state_variable_filter_of_the_itc97_benchmark_set(simulator):
    """ITC'97 mixed-signal benchmark circuits (values from memory): 795.775 Hz, Q 1.1111,
    DC gain -1."""
    frequency, h = response(simulator, state_variable(near_ideal()), 1.0, 1e4, 500)
    f0, q = pair_of(frequency, h, -1.0)
    np.testing.assert_allclose(h[0], -1.0, rtol=2e-3)
    np.testing.assert_allclose([f0, q], [795.775, 1.1111], rtol=5e-5, atol=0)


def test_tow_thomas_resonates_where_its_formula_says(simulator):
    """Tow 1968, Thomas 1971 (from memory): 1/(2 pi R C) = 10.0097 kHz for 10 k and 1.59 nF."""
    frequency, h = response(simulator, tow_thomas(near_ideal(), damping=20e3), 10.0, 1e5, 500)
    f0, q = pair_of(frequency, h, 1.0)
    np.testing.assert_allclose([f0, q], [10009.7, 2.0], rtol=5e-5, atol=0)


def test_integrator_with_a_finite_gain_bandwidth(simulator):
    """H = -(1/sRC) / (1 + 1/(wt R C) + s/wt) for A(s) = wt/s (algebra)."""
    op_amp = figures(gain_bandwidth=1e6, open_loop_gain=1e12)
    frequency, h = response(simulator, integrator(op_amp, 10e3, 1e-9), 1e3, 1e7)
    s, wt, T = 2j * np.pi * frequency, 2 * np.pi * 1e6, 10e3 * 1e-9
    np.testing.assert_allclose(h, -1 / (s * T) / (1 + 1 / (wt * T) + s / wt), rtol=1e-7, atol=0)


def test_open_loop_gain_has_one_pole(simulator):
    """A(s) = A0 / (1 + s A0 / (2 pi GBW)), in both models."""
    op_amp = figures(gain_bandwidth=3e6, open_loop_gain=2e5)
    open_loop = Circuit(
        passives=(part("R1", "in 0", 1e3), part("RL", "out 0", 1e3)),
        amplifiers=(amplifier("U1", "in 0 out", op_amp),),
    )
    frequency, linear = response(simulator, open_loop, 0.1, 1e7)
    expected = 2e5 / (1 + 1j * frequency * 2e5 / 3e6)
    np.testing.assert_allclose(linear, expected, rtol=1e-9, atol=0)
    deck = step_deck(open_loop, title="t", supply=(-12, 12), step_volts=1.0, stop_s=1e-3)
    ac = deck.replace(".end\n", ".ac dec 50 0.1 10000000.0\n.end\n").replace(
        " PWL(", " DC 0 AC 1 PWL("
    )
    found = simulator.ac(ac, ["out"])
    np.testing.assert_allclose(found.voltages["out"], expected, rtol=1e-9, atol=0)


def test_johnson_noise_of_one_kilohm(simulator):
    """4.0704 nV/rtHz at 300 K (Johnson 1928, Nyquist 1928: 4 k T R); ngspice is at 27 C."""
    found = density(simulator, rc(1e3, 1e-15), 1e3)
    np.testing.assert_allclose(found, 4.0704e-9 * math.sqrt(300.15 / 300), rtol=2e-5, atol=0)


def test_total_noise_of_a_leaky_integrator(simulator):
    """sqrt(2 k T / C) = 2.87889 uV at 27 C for equal resistors and 1 nF (closed formula)."""
    deck = board_deck(
        leaky_integrator(near_ideal()), title="t", start_hz=1.0, stop_hz=1e9, points_per_decade=200
    )
    found = simulator.noise(deck, "out", 1.0, 1e9, 200)
    np.testing.assert_allclose(found.total_rms, 2.87889e-6, rtol=5e-5, atol=0)


def test_input_noise_of_an_amplifier(simulator):
    """en times the noise gain, in times Rf, and both resistors, as powers (closed formula)."""
    R, Rf, en, i_n = 10e3, 47e3, 8e-9, 0.5e-12
    op_amp = figures(gain_bandwidth=1e12, open_loop_gain=1e9, voltage_noise=en, current_noise=i_n)
    expected = (en * (1 + Rf / R)) ** 2 + (i_n * Rf) ** 2 + THERMAL * (Rf + Rf**2 / R)
    found = density(simulator, amplifier_of_gain(op_amp, R, Rf), 1e3)
    np.testing.assert_allclose(found, math.sqrt(expected), rtol=1e-6, atol=0)


@pytest.mark.parametrize(("en", "i_n"), [(8e-9, 0.0), (0.0, 5e-12), (3e-9, 5e-12), (0.0, 0.0)])
def test_currents_at_the_two_inputs_are_uncorrelated(simulator, en, i_n):
    """A follower with R at both inputs: their powers add; correlated currents would cancel."""
    R = 20e3
    op_amp = figures(gain_bandwidth=1e12, open_loop_gain=1e9, voltage_noise=en, current_noise=i_n)
    circuit = Circuit(
        passives=(part("R1", "in p", R), part("R2", "m out", R)),
        amplifiers=(amplifier("U1", "p m out", op_amp),),
    )
    expected = math.sqrt(en**2 + 2 * (i_n * R) ** 2 + 2 * THERMAL * R)
    np.testing.assert_allclose(density(simulator, circuit, 1e3), expected, rtol=1e-6, atol=0)


def test_a_large_step_slews_at_the_slew_rate(simulator):
    found = step(
        simulator, follower(figures(slew_rate=2e6)), step_volts=8.0, stop_s=20e-6, edge_s=1e-9
    )
    v, t = found.voltages["out"], found.time_s
    rising = (v > 1.0) & (v < 6.0)
    assert np.count_nonzero(rising) >= 5
    slope = np.polyfit(t[rising], v[rising], 1)[0]
    np.testing.assert_allclose(slope, 2e6, rtol=5e-3, atol=0)
    np.testing.assert_allclose(v[-1], 8.0, rtol=1e-3, atol=0)


def test_a_small_step_follows_the_time_constant(simulator):
    """-(1 - exp(-t/RC)) from the middle of the edge on, with a fast op-amp."""
    op_amp = figures(gain_bandwidth=1e9)
    found = step(simulator, leaky_integrator(op_amp), step_volts=0.1, stop_s=100e-6)
    after = np.maximum(found.time_s - (2e-6 + 5e-9), 0.0)
    expected = -0.1 * -np.expm1(-after / 10e-6)
    np.testing.assert_allclose(found.voltages["out"], expected, rtol=0, atol=1e-4)


@pytest.mark.parametrize(("volts", "end"), [(5.0, -10.5), (-5.0, 10.5)])
def test_an_overdriven_amplifier_stops_at_the_rail_less_its_headroom(simulator, volts, end):
    circuit = amplifier_of_gain(figures(swing_headroom=1.5), 1e3, 10e3)
    found = step(simulator, circuit, step_volts=volts, stop_s=100e-6)
    v = found.voltages["out"]
    np.testing.assert_allclose(v[-1], end, rtol=0, atol=0.011)
    assert np.max(np.abs(v)) <= 10.5 + 0.02
    assert np.ptp(v[found.time_s > 10e-6]) < 5e-3


def test_an_amplifier_leaves_the_rail_without_delay(simulator):
    """No node winds up beyond the rail: after the input returns, the output slews back at once."""
    circuit = amplifier_of_gain(figures(slew_rate=1e7, swing_headroom=1.5), 1e3, 10e3)
    deck = step_deck(circuit, title="t", supply=(-12, 12), step_volts=5.0, stop_s=200e-6)
    line = next(x for x in deck.splitlines() if x.startswith("Vin"))
    pulse = "Vin in 0 PWL(0.0 0.0 1e-05 0.0 1.01e-05 5.0 0.0001 5.0 0.0001001 0.0 0.0002 0.0)"
    found = simulator.transient(deck.replace(line, pulse), ["out"])
    v, t = found.voltages["out"], found.time_s
    assert np.interp(95e-6, t, v) < -10.4
    # 10.5 V at 10 V/us take 1.05 us; the small-signal tail is shorter than another.
    assert abs(np.interp(100.1e-6 + 2.5e-6, t, v)) < 0.05


def test_an_integrator_ends_at_the_rail_and_stays(simulator):
    found = step(simulator, integrator(figures()), step_volts=1.0, stop_s=3e-3)
    v = found.voltages["out"]
    np.testing.assert_allclose(v[-1], -10.5, rtol=0, atol=0.011)
    assert np.ptp(v[found.time_s > 1.3e-3]) < 5e-3
    # -1 V/(RC) = -10 V/ms from the edge on, until the rail.
    np.testing.assert_allclose(np.interp(0.56e-3, found.time_s, v), -5.0, rtol=5e-3, atol=0)
