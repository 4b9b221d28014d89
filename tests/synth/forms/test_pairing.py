"""The chain of sections found is the best of all, by trying all; and what best means."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator
from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings

from synth.forms import pairing
from synth.forms.chains import ChainCost, Section, chain_cost, search_frequencies
from synth.forms.pairing import EQUAL_PEAKS, sections
from synth.peaks import frequencies_of_interest
from synth.transfer import Factor, TransferFunction
from tests.strategies import butterworth, random_target, targets

Pair, Real = Factor.pair, Factor.real


def said(chain: list[Section]) -> list[tuple[list[Factor], list[Factor]]]:
    return [(s.poles, s.zeros) for s in chain]


def every_chain(
    poles: list[Factor], zeros: list[Factor], *, joins: bool
) -> Iterator[list[Section]]:
    """Every pairing in every order, by plain recursion."""
    if not poles:
        if not zeros:
            yield []
        return
    single = [z for z in zeros if z.degree == 1]
    pairs = [[z] for z in zeros if z.degree == 2]
    for pole in poles:
        others = [p for p in poles if p is not pole]
        choices: list[list[Factor]] = [*pairs] if pole.degree == 2 else []
        if pole.degree == 1 or not joins:
            choices += [[], *([z] for z in single)]
        if pole.degree == 2 and not joins:
            choices += [list(two) for two in combinations(single, 2)]
        for held in choices:
            left = [z for z in zeros if not any(z is h for h in held)]
            for rest in every_chain(others, left, joins=joins):
                yield [Section([pole], held), *rest]
    if joins:
        for two in combinations([p for p in poles if p.degree == 1], 2):
            others = [p for p in poles if p not in two]
            for held in pairs:
                left = [z for z in zeros if z is not held[0]]
                for rest in every_chain(others, left, joins=joins):
                    yield [Section(list(two), held), *rest]


def plain_cost(target: TransferFunction, chain: list[Section]) -> ChainCost:
    """The definition read off the module, in complex numbers and without logarithms."""
    f = search_frequencies(target)
    s = 2j * np.pi * f
    whole = target.at(s) / float(target.gain)
    corners = [
        x.natural_frequency / (2 * np.pi) for x in (*target.zero_factors, *target.pole_factors)
    ]
    inside = f <= max(corners) * (1 if target.relative_degree else 10) * 1.000001
    product, peak, noise = np.ones(f.size, dtype=complex), 1.0, 0.0
    for section in chain:
        for zero in section.zeros:
            product = product * zero.at(s)
        for pole in section.poles:
            product = product / pole.at(s)
        gain = np.max(np.abs(product)) / np.max(np.abs(whole)) * np.abs(whole / product)
        peak = max(peak, float(np.max(gain)))
        power = np.trapezoid(gain[inside] ** 2, f[inside]) / (f[inside][-1] - f[inside][0])
        noise += float(power)
    return ChainCost(peak=peak, noise=noise)


KINDS = {
    "three pairs, three pairs of zeros": (3, 0, 3, 0),
    "two pairs, single zeros": (2, 0, 0, 3),
    "pairs and real roots": (2, 2, 1, 2),
    "real roots": (0, 5, 0, 2),
    "real poles that join": (0, 5, 1, 1),
    "real poles that join, beside a pair": (1, 4, 2, 1),
    "all that fits": (1, 2, 1, 2),
}


def drawn(kind: str, seed: int) -> TransferFunction:
    rng = np.random.default_rng(seed)
    pairs, reals, zero_pairs, zero_reals = KINDS[kind]

    def w() -> float:
        return float(10 ** rng.uniform(3, 5))

    def pair() -> Factor:
        return Pair(w(), float(rng.uniform(0.6, 12)))

    poles = [*(pair() for _ in range(pairs)), *(Real(-w()) for _ in range(reals))]
    zeros = [*(pair() for _ in range(zero_pairs)), *(Real(-w()) for _ in range(zero_reals))]
    return TransferFunction.from_factors(3.7, zeros, poles)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("seed", range(3))
def test_no_pairing_and_no_order_is_better(kind: str, seed: int) -> None:
    """Against all chains one by one: the least peak, and the least noise within reach of it."""
    target = drawn(kind, seed)
    joins = kind.startswith("real poles that join")
    chains = list(every_chain(list(target.pole_factors), list(target.zero_factors), joins=joins))
    costs = [plain_cost(target, chain) for chain in chains]
    least = min(c.peak for c in costs)
    quiet = min(c.noise for c in costs if c.peak <= least * EQUAL_PEAKS * (1 + 1e-9))
    found = plain_cost(target, sections(target))
    assert len(chains) > 10
    assert found.peak <= least * EQUAL_PEAKS * (1 + 1e-9)
    assert found.noise == pytest.approx(quiet, rel=1e-6)


@pytest.mark.parametrize("kind", KINDS)
def test_the_cost_of_a_chain_is_its_definition(kind: str) -> None:
    """Chains good and bad."""
    target = drawn(kind, 7)
    joins = kind.startswith("real poles that join")
    chains = every_chain(list(target.pole_factors), list(target.zero_factors), joins=joins)
    for _, chain in zip(range(25), chains, strict=False):
        cost, plain = chain_cost(target, chain), plain_cost(target, chain)
        assert cost.peak == pytest.approx(plain.peak, rel=1e-9)
        assert cost.noise == pytest.approx(plain.noise, rel=1e-9)


def test_a_butterworth_filter_of_order_four_loses_the_peak_of_its_sharper_section() -> None:
    """Q = 1 / (2 sin(pi/8)) peaks at Q / sqrt(1 - 1/(4 Q^2)) = 1 / sin(pi/4); the other section
    and the filter do not peak, so either order loses sqrt(2)."""
    target = butterworth(4, 1e3)
    found = sections(target)
    for chain in (found, found[::-1]):
        assert chain_cost(target, chain).peak == pytest.approx(math.sqrt(2), rel=2e-3)


def test_what_an_order_loses_its_reverse_loses_too() -> None:
    """max|T| max|H/T| does not ask which of the two comes first."""
    for seed in range(10):
        target = random_target(np.random.default_rng(seed), 7, decades=2)
        chain = sections(target)
        there, back = chain_cost(target, chain), chain_cost(target, chain[::-1])
        assert there.peak == pytest.approx(back.peak, rel=1e-9)


def test_an_integrator_is_not_left_to_amplify_what_came_before() -> None:
    """A Type III compensator, s and two zeros far below two poles: with 1/s first the zeros
    behind it amplify the noise of its output from 800 rad/s on; with 1/s last it filters."""
    integrator, pole, zero = Real(0), Real(-5e4), Real(-800.0)
    target = TransferFunction.from_factors(1e6, [zero, zero], [integrator, pole, pole])
    found = sections(target)
    assert found[-1].poles == [integrator]
    usual = [Section([integrator]), Section([pole], [zero]), Section([pole], [zero])]
    assert chain_cost(target, usual).peak > 100 * chain_cost(target, found).peak


def near_and_rising(target: TransferFunction) -> list[Section]:
    """Common practice: each zero to the nearest pole with room, pairs first; then by rising Q."""
    made = [Section([p]) for p in target.pole_factors]

    def away(section: Section, zero: Factor) -> float:
        a, b = (math.log(max(f, 1e-300)) for f in (section.frequency, zero.natural_frequency))
        return abs(a - b)

    for zero in sorted(target.zero_factors, key=lambda z: (-z.degree, -abs(z.q))):
        hosts = [s for s in made if s.room >= zero.degree]
        if not hosts:
            host, other = sorted((s for s in made if s.room == 1), key=lambda s: away(s, zero))[:2]
            host.poles += other.poles
            made.remove(other)
            hosts = [host]
        min(hosts, key=lambda s: away(s, zero)).zeros.append(zero)
    return sorted(made, key=lambda s: (s.q, s.frequency))


@settings(deadline=None, derandomize=True, max_examples=80)
@given(targets())
def test_never_worse_than_nearest_poles_in_rising_q(target: TransferFunction) -> None:
    """A smaller peak, or one within reach and no more noise."""
    found, usual = (chain_cost(target, c) for c in (sections(target), near_and_rising(target)))
    assert found.peak <= usual.peak * EQUAL_PEAKS * (1 + 1e-9)
    assert found.peak <= usual.peak * (1 + 1e-9) or found.noise <= usual.noise * (1 + 1e-6)


@settings(deadline=None, derandomize=True, max_examples=40)
@given(targets(orders=(1, 12), decades=6.0))
def test_every_factor_stands_in_one_section_that_holds_it(target: TransferFunction) -> None:
    """Orders 1 to 12: nothing lost, nothing twice, at most second order, never improper."""
    chain = sections(target)
    assert Counter(p for s in chain for p in s.poles) == Counter(target.pole_factors)
    assert Counter(z for s in chain for z in s.zeros) == Counter(target.zero_factors)
    assert all(s.room >= 0 and sum(p.degree for p in s.poles) <= 2 for s in chain)


def test_real_poles_join_only_where_pairs_of_zeros_need_them() -> None:
    """Two pairs of zeros: with two pairs of poles no real poles join, with one pair two do."""
    zeros = [Pair(2e3, 9), Pair(3e3, 7)]
    reals = [Real(-1e3), Real(-4e3)]
    enough = sections(TransferFunction.from_factors(1, zeros, [Pair(1e3, 3), Pair(5e3, 2), *reals]))
    short = sections(TransferFunction.from_factors(1, zeros, [Pair(1e3, 3), *reals, Real(-9e3)]))
    assert [len(s.poles) for s in enough] == [1, 1, 1, 1]
    assert sorted(len(s.poles) for s in short) == [1, 1, 2]
    assert all(s.zeros[0].degree == 2 for s in short if len(s.poles) == 2)


def test_the_order_in_which_factors_are_given_does_not_matter() -> None:
    """Shuffled factors give the same chain, though equal ones are among them, and zeros that
    mirror each other and so cost the same wherever they stand."""
    rng = np.random.default_rng(5)
    poles = [Pair(1e3, 2), Pair(1e3, 2), Pair(4e3, 5), Real(-7e2), Real(-7e2), Real(-2e4)]
    zeros = [Real(0), Real(0), Real(-3e3), Real(3e3)]
    first = said(sections(TransferFunction.from_factors(1, zeros, poles)))
    for _ in range(4):
        mixed = [[list(fs)[k] for k in rng.permutation(len(fs))] for fs in (zeros, poles)]
        assert said(sections(TransferFunction.from_factors(1, *mixed))) == first


@pytest.mark.parametrize(
    ("zeros", "poles"),
    [([], [Real(-1e3)] * 12), ([Real(0)] * 12, [Pair(1e3, 2)] * 6), ([], [Real(0)] * 3)],
    ids=["equal real poles", "equal pairs", "integrators alone"],
)
def test_equal_factors_count_once(zeros: list[Factor], poles: list[Factor]) -> None:
    """Twelve equal poles are thirteen subsets, not 4096."""
    target = TransferFunction.from_factors(1, zeros, poles)
    chain = sections(target)
    assert len(chain) == len(poles)
    assert pairing._Search(target).poles.size == len(poles) + 1


def test_a_search_too_large_first_gives_near_zeros_to_real_poles() -> None:
    """Twelve real poles and zeros: the six nearest couples stay together, and no more."""
    poles = [Real(-float(10**k)) for k in range(12)]
    zeros = [Real(-float(10**k) * (1.1 + 0.1 * k)) for k in range(12)]
    target = TransferFunction.from_factors(1, zeros, poles)
    search = pairing._Search(target)
    assert search.poles.size * search.zeros.size == pairing.LARGEST_TABLE
    fixed = {i.pole: i.zeros for i in search.poles.kinds if i.zeros}
    assert fixed == {poles[k]: (zeros[k],) for k in range(6)}
    chain = sections(target)
    assert {s.poles[0]: tuple(s.zeros) for s in chain}.items() >= fixed.items()
    usual = chain_cost(target, near_and_rising(target))
    assert chain_cost(target, chain).peak <= usual.peak * EQUAL_PEAKS


def test_real_poles_that_pairs_of_zeros_need_are_not_given_away(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """However small the table must be, two real poles stay free for each pair of zeros."""
    monkeypatch.setattr(pairing, "LARGEST_TABLE", 1)
    rng = np.random.default_rng(2)
    poles = [Real(-float(10 ** rng.uniform(2, 6))) for _ in range(12)]
    zeros = [Pair(float(10 ** rng.uniform(2, 6)), 3) for _ in range(3)]
    zeros += [Real(-float(10 ** rng.uniform(2, 6))) for _ in range(6)]
    chain = sections(TransferFunction.from_factors(1, zeros, poles))
    assert sum(len(s.poles) == 2 for s in chain) == 3


def test_a_pair_of_poles_on_the_axis_is_judged_beside_it() -> None:
    """An oscillator's pair under a damped one of the same frequency: finite, and in order."""
    poles = [Pair(1e3, math.inf), Pair(1e3, 4), Pair(3e3, 2)]
    target = TransferFunction.from_factors(1, [Real(-2e3)], poles)
    cost = chain_cost(target, sections(target))
    assert cost.peak < 100
    assert np.min(np.abs(2 * np.pi * search_frequencies(target) / 1e3 - 1)) > 0.009


def test_few_frequencies_see_the_peaks_that_many_see() -> None:
    """c on the thinned grid against that on the whole one: within 3 %."""
    for seed in range(20):
        target = random_target(np.random.default_rng(seed), 8, decades=3)
        chain = sections(target)
        s = 2j * np.pi * frequencies_of_interest(target)
        whole = target.at(s) / float(target.gain)
        product, peak = np.ones(s.size, dtype=complex), 1.0
        for section in chain:
            for factor, power in [
                *((z, 1) for z in section.zeros),
                *((p, -1) for p in section.poles),
            ]:
                product = product * factor.at(s) ** power
            lost = np.max(np.abs(product)) * np.max(np.abs(whole / product))
            peak = max(peak, float(lost / np.max(np.abs(whole))))
        assert chain_cost(target, chain).peak == pytest.approx(peak, rel=0.03)
