"""The causes of the spread against the boards that are drawn, and against runs of whole circuits.

Second method throughout: numbers drawn by `BoardSource`, which knows nothing of variances.
"""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.evidence import response_error
from synth.nodal import compile_circuit
from synth.population import Network, PartSpread, Population
from synth.tolerance import BoardSource, predicted_spread
from synth.tolerance.spread import Causes
from tests.circuits import amplifier_of_gain, figures, near_ideal, rc, state_variable, tow_thomas

BOARDS = 20_000
SLOW = figures(gain_bandwidth=3e6)
BAND = np.geomspace(500.0, 30e3, 41)

shares = st.sampled_from([0.0, 0.3, 1.0])
coefficients = st.sampled_from([0.0, 3e-5, 2e-4])


@st.composite
def populations(draw):
    """Any population of a circuit with R1 to R6 and C1, C2."""
    warm = draw(st.booleans())

    def spread():
        return PartSpread(
            distribution=draw(st.sampled_from(["uniform", "normal"])),
            lot=draw(shares),
            temperature_coefficient=draw(coefficients) if warm else 0.0,
        )

    resistors, capacitors = spread(), spread()
    tracking = draw(st.sampled_from([None, 5e-6, 1e-4])) if warm else None
    refs = draw(st.sampled_from([(), ("R1", "R3"), ("R2", "R4", "R6"), ("C1", "C2")]))
    networks = (Network(refs=refs, tolerance=0.001, tracking=tracking),) if refs else ()
    drifts = any([resistors.temperature_coefficient, capacitors.temperature_coefficient])
    drifts = drifts or (bool(networks) and tracking is not None)
    temperatures = draw(st.sampled_from([(0.0, 60.0), (-40.0, 10.0), (20.0, 85.0)]))
    return Population(
        resistors=resistors,
        capacitors=capacitors,
        networks=networks,
        temperature=temperatures if drifts else None,
        gain_bandwidth_spread=draw(st.sampled_from([0.0, 0.4])),
    )


def board(op_amp=SLOW):
    """A two-integrator loop of 0.5 % and 1 %, so that second order hardly shows."""
    circuit = tow_thomas(op_amp, damping=30e3)
    return replace(
        circuit,
        passives=tuple(
            replace(p, rule=replace(p.rule, tolerance=0.005 if p.kind == "resistor" else 0.01))
            for p in circuit.passives
        ),
    )


def logarithms(circuit, drawn):
    """ln of the passives and -(1 / gain-bandwidth) of the op-amps, relative to the nominal."""
    parts = np.log(drawn.values / [p.value for p in circuit.passives])
    if drawn.gain_bandwidth is None:
        return parts, np.zeros((len(parts), len(circuit.amplifiers)))
    return parts, 1 - [a.figures.gain_bandwidth for a in circuit.amplifiers] / drawn.gain_bandwidth


@settings(max_examples=25)
@given(populations(), st.integers(0, 1000))
def test_the_covariance_of_the_causes_is_that_of_the_boards_drawn(population, seed):
    """Of every pair, parts and op-amps: within what 20,000 boards can tell of it (a product of two
    numbers of variance 1 has one of at most about 3)."""
    circuit = board()
    causes = Causes.of(circuit, population)
    loading = np.hstack([causes.passives, causes.amplifiers])
    expected = loading.T @ loading
    found = np.cov(
        np.hstack(logarithms(circuit, BoardSource(circuit, population, seed).draw(BOARDS))).T
    )
    sigma = np.sqrt(np.outer(expected.diagonal(), expected.diagonal()))
    np.testing.assert_array_less(
        np.abs(found - expected), 6 * math.sqrt(3 / BOARDS) * sigma + 1e-12
    )


@settings(max_examples=15)
@given(populations(), st.integers(0, 1000))
def test_the_predicted_spread_is_that_of_a_run_of_boards(population, seed):
    """Of ln|H| and of the phase at the frequency where either spreads most: the variance within
    sampling error, for which the boards' own fourth moment is asked, and 3 % for second order."""
    circuit = board()
    program = compile_circuit(circuit)
    spread = predicted_spread(program.sensitivities(BAND), circuit, population)
    drawn = BoardSource(circuit, population, seed).draw(4000)
    response = program.solve(BAND, values=drawn.values, gain_bandwidth=drawn.gain_bandwidth)
    error = response_error(response, program.solve(BAND))
    for sigma, errors in (
        (spread.magnitude_db, error.magnitude_db),
        (spread.phase_deg, error.phase_deg),
    ):
        worst = int(np.argmax(sigma))
        own = errors[:, worst] - errors[:, worst].mean()
        variance = np.mean(own**2)
        doubt = math.sqrt(np.mean(own**4) / variance**2 - 1) / math.sqrt(own.size)
        assert sigma[worst] ** 2 == pytest.approx(variance, rel=5 * doubt + 0.03)


@given(populations())
def test_shares_add_up_and_none_is_negative(population):
    """The squares of what the causes do are the square of the spread."""
    circuit = board()
    sensitivities = compile_circuit(circuit).sensitivities(BAND)
    causes = Causes.of(circuit, population)
    effects = causes.effects(sensitivities)
    assert len(causes.names) == effects.shape[1]
    assert np.all(np.abs(causes.passives).max(axis=1) + np.abs(causes.amplifiers).max(axis=1) > 0)
    spread = predicted_spread(sensitivities, circuit, population)
    np.testing.assert_allclose(
        np.radians(spread.phase_deg) ** 2, (effects.imag**2).sum(axis=1), rtol=1e-9
    )


def test_parts_of_one_reel_add_as_numbers_and_others_as_squares():
    """1/(s R C) is worth R + C: of a reel taken whole (lot 100 %) two resistors in one gain cancel,
    R2/R1; on their own they do not.  And two integrators with capacitors of one reel are worth
    twice one capacitor: 2 tol/sqrt(3), not sqrt(2)."""
    whole = Population(resistors=PartSpread(lot=1.0), capacitors=PartSpread(lot=1.0))
    gain = amplifier_of_gain(near_ideal())
    sensitivities = compile_circuit(gain).sensitivities([100.0])
    apart = predicted_spread(sensitivities, gain).magnitude_db[0]
    assert apart == pytest.approx(20 / math.log(10) * 0.01 * math.sqrt(2 / 3), rel=1e-6)
    assert predicted_spread(sensitivities, gain, whole).magnitude_db[0] < 1e-6 * apart
    assert list(Causes.of(gain, whole).names) == [("lot", ("R1", "R2"))]
    loop = tow_thomas(near_ideal())
    causes = Causes.of(loop, whole)
    (row,) = (k for k, (_, refs) in enumerate(causes.names) if refs == ("C1", "C2"))
    assert causes.passives[row].sum() == pytest.approx(2 * 0.05 / math.sqrt(3))


def test_matched_parts_keep_their_ratio():
    """R2/R1 of 1 % parts matched to 0.1 %: h = 0.001/2.001 each, uniform, two of them."""
    gain = amplifier_of_gain(near_ideal())
    matched = Population(networks=(Network(refs=("R1", "R2"), tolerance=0.001),))
    sensitivities = compile_circuit(gain).sensitivities([100.0])
    found = predicted_spread(sensitivities, gain, matched).magnitude_db[0]
    expected = 20 / math.log(10) * 0.001 / 2.001 * math.sqrt(2 / 3)
    assert found == pytest.approx(expected, rel=1e-6)
    effects = Causes.of(gain, matched).effects(sensitivities)
    by_name = dict(zip(Causes.of(gain, matched).names, effects[0], strict=True))
    assert abs(by_name["network", ("R1", "R2")]) < 1e-6


def test_temperature_spreads_a_corner_by_the_mean_square_of_the_distance_from_25_degrees():
    """1/(s R C) far above the corner: coefficients uniform within a, 0 to 60 degC: variance
    2 a^2/3 (5^2 + 30^2/3), beside (0.01^2 + 0.05^2)/3 of the tolerances."""
    circuit, a = rc(), 1e-3
    warm = PartSpread(temperature_coefficient=a)
    population = Population(resistors=warm, capacitors=warm, temperature=(0.0, 60.0))
    sensitivities = compile_circuit(circuit).sensitivities([1e7])
    found = predicted_spread(sensitivities, circuit, population).magnitude_db[0]
    variance = 2 * a**2 / 3 * (25 + 300) + (0.01**2 + 0.05**2) / 3
    assert found == pytest.approx(20 / math.log(10) * math.sqrt(variance), rel=1e-5)


def test_what_is_not_on_the_board_and_what_has_no_tolerance_is_no_cause():
    circuit = state_variable(near_ideal())
    still = replace(
        circuit,
        passives=tuple(
            replace(p, rule=replace(p.rule, tolerance=0.0)) if p.ref != "R4" else p
            for p in circuit.passives
        ),
    )
    assert Causes.of(still).names == (("own", ("R4",)),)


def test_op_amps_spread_by_package():
    """Three op-amps in one: 1/(1 + 0.4 n) has a standard deviation of 0.2622 (numpy)."""
    causes = Causes.of(board(), Population(gain_bandwidth_spread=0.4))
    assert causes.names[-1] == ("op_amp", ("U1", "U2", "U3"))
    number = np.linspace(-1, 1, 200_001)
    np.testing.assert_allclose(causes.amplifiers[-1], np.std(1 / (1 + 0.4 * number)), rtol=1e-4)
