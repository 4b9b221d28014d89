"""What each distribution promises of the boards: means, deviations, bounds, correlations.

Samples are of 20,000 boards: a mean is then good to 0.7 % of a standard deviation, a standard
deviation to 0.5 %, a correlation of 0 to 0.7 %; the bounds asked for are four times as wide.
"""

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import kstest, truncnorm

from synth.circuit import Circuit
from synth.errors import JobError
from synth.nodal import compile_circuit
from synth.population import Network, PartSpread, Population
from synth.tolerance import BoardSource, check_networks
from synth.tolerance.drawing import within_tolerance
from synth.tolerance.makeup import packages_of
from tests.synth.nodal.boards import amplifier, capacitor, chain, op_amp, resistor

BOARDS = 20_000


def ladder():
    """R1, R2, R4 of 10 k, R3 of 20 k, all of 1 %; C1, C2 of 10 nF, 5 %; six op-amps."""
    return Circuit(
        passives=(
            resistor("R1", "in", "a", 10e3),
            resistor("R2", "a", "0", 10e3),
            resistor("R3", "a", "0", 20e3),
            resistor("R4", "a", "0", 10e3),
            capacitor("C1", "a", "0", 10e-9),
            capacitor("C2", "u5", "out", 10e-9),
            resistor("RL", "out", "0", 1e5, bought=False),
        ),
        amplifiers=tuple(
            amplifier(f"U{k + 1}", "a" if k == 0 else f"u{k - 1}", f"u{k}", f"u{k}", op_amp())
            for k in range(6)
        ),
    )


def deviations(population, *, boards=BOARDS, seed=4, circuit=None):
    """Relative, by reference."""
    made = circuit or ladder()
    values = BoardSource(made, population, seed).draw(boards).values
    nominal = np.array([p.value for p in made.passives])
    return dict(zip([p.ref for p in made.passives], (values / nominal - 1).T, strict=True))


def correlation(a, b):
    return np.corrcoef(a, b)[0, 1]


@pytest.mark.parametrize(("distribution", "sigma"), [("uniform", 0.57735), ("normal", 0.3289)])
def test_mean_deviation_and_bounds_of_each_distribution(distribution, sigma):
    """Standard deviations in tolerances: 1/sqrt(3), and 0.3289 of a normal one cut at 3 sigma."""
    spread = PartSpread(distribution=distribution)
    found = deviations(Population(resistors=spread, capacitors=spread))
    for ref, tolerance in (("R1", 0.01), ("R3", 0.01), ("C1", 0.05)):
        share = found[ref] / tolerance
        assert abs(share.mean()) < 4 * sigma / math.sqrt(BOARDS)
        assert share.std() == pytest.approx(sigma, rel=0.02)
        assert np.abs(share).max() <= 1 + 1e-12
        assert np.abs(share).max() > 0.97
    assert abs(correlation(found["R1"], found["R2"])) < 0.03
    np.testing.assert_array_equal(found["RL"], 0.0)


def test_the_normal_distribution_is_the_one_of_the_textbook():
    """A second method: scipy's own cut normal distribution, by its distribution function."""
    found = deviations(Population(resistors=PartSpread(distribution="normal")))
    assert kstest(found["R2"] / 0.01, truncnorm(-3, 3, scale=1 / 3).cdf).pvalue > 1e-3
    assert kstest(found["C1"] / 0.05, truncnorm(-3, 3, scale=1 / 3).cdf).pvalue < 1e-9
    number = np.linspace(-1, 1, 41)
    np.testing.assert_allclose(
        within_tolerance(number, "normal"),
        truncnorm(-3, 3, scale=1 / 3).ppf((1 + number) / 2),
        atol=1e-12,
    )


def test_parts_of_a_reel_share_their_offset_and_others_do_not():
    """Offset uniform within half of the tolerance, the rest the part's own: equal variances, so a
    correlation of one half; another value, another reel."""
    found = deviations(Population(resistors=PartSpread(lot=0.5)))
    assert correlation(found["R1"], found["R2"]) == pytest.approx(0.5, abs=0.03)
    assert correlation(found["R1"], found["R4"]) == pytest.approx(0.5, abs=0.03)
    assert abs(correlation(found["R1"], found["R3"])) < 0.03
    assert abs(correlation(found["C1"], found["C2"])) < 0.03
    sigma = 0.01 * math.sqrt(2 * 0.5**2 / 3)
    for ref in ("R1", "R2", "R3", "R4"):
        assert found[ref].std() == pytest.approx(sigma, rel=0.02)
        assert np.abs(found[ref]).max() <= 0.01 + 1e-12


@pytest.mark.parametrize("share", [0.2, 0.8, 1.0])
def test_the_correlation_in_a_reel_follows_from_the_share(share):
    found = deviations(Population(capacitors=PartSpread(lot=share)))
    expected = share**2 / (share**2 + (1 - share) ** 2)
    assert correlation(found["C1"], found["C2"]) == pytest.approx(expected, abs=0.03)


def test_within_a_reel_a_normal_distribution_fills_the_rest():
    found = deviations(Population(resistors=PartSpread(distribution="normal", lot=0.4)))
    between = (found["R1"] - found["R2"]) / 0.01
    assert between.std() == pytest.approx(math.sqrt(2) * 0.6 * 0.3289, rel=0.02)
    assert np.abs(found["R1"]).max() <= 0.01 + 1e-12


@settings(max_examples=25, deadline=None)
@given(
    ratio=st.floats(0, 0.01),
    distribution=st.sampled_from(["uniform", "normal"]),
    seed=st.integers(0, 2**32),
)
def test_matched_parts_keep_both_their_ratio_and_their_own_tolerance(ratio, distribution, seed):
    network = Network(refs=("R1", "R3", "R4"), tolerance=ratio)
    population = Population(
        resistors=PartSpread(distribution=distribution, lot=0.3), networks=(network,)
    )
    found = deviations(population, boards=300, seed=seed)
    for a, b in itertools.permutations(network.refs, 2):
        assert np.abs((1 + found[a]) / (1 + found[b]) - 1).max() <= ratio + 1e-12
    for ref in network.refs:
        assert np.abs(found[ref]).max() <= 0.01 + 1e-12


def test_matched_parts_move_together_over_their_whole_tolerance():
    found = deviations(Population(networks=(Network(refs=("R1", "R3"), tolerance=0.001),)))
    assert correlation(found["R1"], found["R3"]) > 0.99
    assert abs(correlation(found["R1"], found["R2"])) < 0.03
    ratio = (1 + found["R1"]) / (1 + found["R3"]) - 1
    # Two deviations uniform within half of the ratio tolerance: triangular.
    assert ratio.std() == pytest.approx(0.001 / math.sqrt(6), rel=0.03)
    assert np.abs(ratio).max() > 0.0009
    assert found["R1"].std() == pytest.approx(0.0095 / math.sqrt(3), rel=0.02)


def warm(**options):
    """Parts exact at 25 deg C: what is left is temperature."""
    exact = tuple(replace(p, grade=0.0) if p.on_board else p for p in ladder().passives)
    made = replace(ladder(), passives=exact)
    return deviations(Population(temperature=(-15.0, 65.0), **options), circuit=made)


def test_temperature_moves_each_part_by_its_own_coefficient():
    """Coefficient uniform within 50 ppm/K and T - 25 within 40 K: a product of two uniform
    numbers, of standard deviation 50e-6 40 / 3; the one temperature leaves signs uncorrelated, and
    sizes correlated."""
    found = warm(resistors=PartSpread(temperature_coefficient=50e-6))
    for ref in ("R1", "R2", "R3"):
        assert found[ref].std() == pytest.approx(50e-6 * 40 / 3, rel=0.03)
        assert np.abs(found[ref]).max() <= 50e-6 * 40 * (1 + 1e-9)
    assert abs(correlation(found["R1"], found["R2"])) < 0.03
    # |x| = |a||T|, |y| = |b||T|: (1/2 1/2 1/3 - 1/16) / (1/9 - 1/16) = 3/7.
    assert correlation(abs(found["R1"]), abs(found["R2"])) == pytest.approx(3 / 7, abs=0.03)
    np.testing.assert_array_equal(found["C1"], 0.0)


def test_the_middle_of_the_temperatures_counts_too():
    circuit = ladder()
    hot = Population(
        temperature=(84.999, 85.001), capacitors=PartSpread(temperature_coefficient=1e-3)
    )
    cold = Population(capacitors=PartSpread())
    one, other = (deviations(p, circuit=circuit) for p in (hot, cold))
    drift = (1 + one["C1"]) / (1 + other["C1"]) - 1
    assert drift.std() == pytest.approx(1e-3 * 60 / math.sqrt(3), rel=0.02)
    assert np.abs(drift).max() <= 0.0601


def test_matched_parts_track():
    network = Network(refs=("R1", "R2"), tolerance=0.0, tracking=5e-6)
    found = warm(resistors=PartSpread(temperature_coefficient=50e-6), networks=(network,))
    apart = found["R1"] - found["R2"]
    assert np.abs(apart).max() <= 5e-6 * 40 * (1 + 1e-9)
    assert np.abs(apart).max() > 0.8 * 5e-6 * 40
    assert np.abs(found["R1"]).max() <= 50e-6 * 40 * (1 + 1e-9)
    assert found["R1"].std() == pytest.approx(47.5e-6 * 40 / 3, rel=0.03)
    assert correlation(found["R1"], found["R2"]) > 0.99
    assert abs(correlation(found["R1"], found["R4"])) < 0.03


def test_without_tracking_matched_parts_have_coefficients_of_their_own():
    network = Network(refs=("R1", "R2"), tolerance=0.0)
    found = warm(resistors=PartSpread(temperature_coefficient=50e-6), networks=(network,))
    assert abs(correlation(found["R1"], found["R2"])) < 0.03


def test_op_amps_of_a_package_are_alike_and_packages_are_not():
    drawn = BoardSource(ladder(), Population(gain_bandwidth_spread=0.4), 1).draw(BOARDS)
    share = drawn.gain_bandwidth / 10e6 - 1
    for k in (1, 2, 3):
        np.testing.assert_array_equal(share[:, 0], share[:, k])
    np.testing.assert_array_equal(share[:, 4], share[:, 5])
    assert abs(correlation(share[:, 0], share[:, 4])) < 0.03
    assert share[:, 0].std() == pytest.approx(0.4 / math.sqrt(3), rel=0.02)
    assert np.abs(share).max() <= 0.4
    assert packages_of(5) == (0, 0, 0, 0, 1)
    assert BoardSource(ladder(), Population(), 1).draw(3).gain_bandwidth is None


EVERYTHING = Population(
    resistors=PartSpread(distribution="normal", lot=0.4, temperature_coefficient=50e-6),
    capacitors=PartSpread(lot=0.2, temperature_coefficient=30e-6),
    networks=(Network(refs=("R1", "R3"), tolerance=0.001, tracking=5e-6),),
    temperature=(0.0, 60.0),
    gain_bandwidth_spread=0.3,
)


def test_a_board_is_the_same_whatever_the_blocks():
    whole = BoardSource(ladder(), EVERYTHING, 7).draw(90)
    source = BoardSource(ladder(), EVERYTHING, 7)
    parts = [source.draw(n) for n in (1, 17, 72)]
    np.testing.assert_array_equal(np.concatenate([p.values for p in parts]), whole.values)
    np.testing.assert_array_equal(
        np.concatenate([p.gain_bandwidth for p in parts]), whole.gain_bandwidth
    )
    other = BoardSource(ladder(), EVERYTHING, 8).draw(90)
    assert np.all(other.values[:, :6] != whole.values[:, :6])


def test_what_is_not_stated_draws_what_it_always_drew():
    """One uniform number per part, board by board, from the generator of the seed."""
    number = np.random.default_rng(5).uniform(-1, 1, (40, 6))
    found = deviations(Population(), boards=40, seed=5)
    bought = np.array([found[ref] for ref in ("R1", "R2", "R3", "R4", "C1", "C2")]).T
    expected = number * [0.01, 0.01, 0.01, 0.01, 0.05, 0.05]
    np.testing.assert_allclose(bought, expected, atol=1e-15)


def test_one_more_cause_leaves_the_others_as_they_are():
    plain = deviations(Population(), boards=50)
    amps = deviations(Population(gain_bandwidth_spread=0.2), boards=50)
    matched = deviations(Population(networks=(Network(refs=("R1", "R2"), tolerance=0),)), boards=50)
    for ref in ("R3", "R4", "C1", "C2"):
        np.testing.assert_array_equal(plain[ref], amps[ref])
        np.testing.assert_array_equal(plain[ref], matched[ref])
    assert np.all(plain["R1"] != matched["R1"])


def test_a_network_stands_for_both_resistors_of_a_pair():
    """R4 became R4A and R4B: both are matched with R1."""
    made = Circuit(
        passives=(
            resistor("R1", "in", "out", 10e3),
            resistor("R4A", "out", "0", 20e3),
            resistor("R4B", "out", "0", 30e3),
        ),
        amplifiers=(),
    )
    network = Network(refs=("R1", "R4"), tolerance=0.0)
    found = deviations(Population(networks=(network,)), circuit=made, boards=50)
    np.testing.assert_allclose(found["R1"], found["R4A"], atol=1e-15)
    np.testing.assert_allclose(found["R1"], found["R4B"], atol=1e-15)


@pytest.mark.parametrize(
    ("network", "message"),
    [
        (
            Network(refs=("R1", "R9"), tolerance=0.001),
            r"board.networks\[1\].refs: got R9, a reference that does not exist in this form, "
            "expected R1 to R4",
        ),
        (
            Network(refs=("R1", "R2"), tolerance=0.02),
            r"board.networks\[1\].tolerance: got 2 % between parts, expected at most the 1 % of R1",
        ),
    ],
)
def test_a_network_that_does_not_fit_the_circuit_is_refused(network, message):
    with pytest.raises(JobError, match=message):
        check_networks(ladder(), Population(networks=(network,)))


def test_a_part_tighter_than_its_network_keeps_its_tolerance():
    """As a stock may have it: known only once values are chosen."""
    network = Network(refs=("R1", "R2"), tolerance=0.05)
    found = deviations(Population(networks=(network,)), boards=2000)
    assert np.abs(found["R1"]).max() <= 0.01 + 1e-12
    assert abs(correlation(found["R1"], found["R2"])) < 0.1
    with pytest.raises(JobError, match="got R9"):
        BoardSource(ladder(), Population(networks=(Network(refs=("R9", "R8"), tolerance=0),)), 1)


@pytest.mark.parametrize(
    "population",
    [
        Population(),
        Population(
            resistors=PartSpread(distribution="normal"),
            capacitors=PartSpread(distribution="normal", lot=0.5),
        ),
    ],
)
def test_no_board_of_an_rc_lies_beyond_all_combinations_of_its_corners(population):
    """Corner of an RC, 1 % and 5 %: -5.705 and +6.326 % (recomputed).  A single lot of a value
    leaves the part within its tolerance."""
    made = Circuit(
        passives=(resistor("R1", "in", "out", 10e3), capacitor("C1", "out", "0", 10e-9)),
        amplifiers=(),
    )
    program = compile_circuit(made)
    values = BoardSource(made, population, 2).draw(BOARDS).values
    corners = np.array([[r, c] for r in (0.99, 1.01) for c in (0.95, 1.05)]) * [10e3, 10e-9]

    def percent(v):
        corner = 1000.0 / (1 / program.solve([1000.0], values=v)[:, 0]).imag
        return 100 * (corner * 2 * np.pi * 1e-4 - 1)

    low, high = percent(corners).min(), percent(corners).max()
    assert (low, high) == pytest.approx((-5.705, 6.326), abs=5e-4)
    found = percent(values)
    assert low < found.min() < -4
    assert 4 < found.max() < high


def test_every_op_amp_of_a_circuit_has_a_column():
    made = chain(3, op_amp())
    drawn = BoardSource(made, EVERYTHING_BUT_NETWORKS, 1).draw(4)
    assert drawn.gain_bandwidth.shape == (4, len(made.amplifiers))
    assert drawn.values.shape == (4, len(made.passives))


EVERYTHING_BUT_NETWORKS = Population(
    resistors=EVERYTHING.resistors, temperature=(0.0, 50.0), gain_bandwidth_spread=0.2
)


def test_other_tolerances_give_the_same_boards_otherwise():
    """R1 at half its tolerance deviates half as much, about the same offset of its reel; C1 moves
    as before; in a network the tightest part binds all."""
    lots = Population(resistors=PartSpread(lot=0.5), capacitors=PartSpread(lot=0.2))
    before = deviations(lots, boards=50)
    source = BoardSource(ladder(), lots, 4, tolerances={"R1": 0.005})
    nominal = np.array([p.value for p in ladder().passives])
    after = dict(zip(before, (source.draw(50).values / nominal - 1).T, strict=True))
    np.testing.assert_allclose(after["R1"], before["R1"] / 2, rtol=1e-9, atol=1e-15)
    for ref in before.keys() - {"R1"}:
        np.testing.assert_array_equal(after[ref], before[ref])
    pair = Population(networks=(Network(refs=("R1", "R3"), tolerance=0.001),))
    tight = BoardSource(ladder(), pair, 4, tolerances={"R1": 0.002}).draw(BOARDS)
    assert np.abs(tight.values[:, 2] / 20e3 - 1).max() <= 0.002 * (1 + 1e-9)
