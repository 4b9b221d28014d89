"""The doubly terminated ladder: published element values, the target, Orchard's argument."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.signal
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.errors import RealizationError
from synth.forms import realize
from synth.forms.leapfrog import matched_ladder
from synth.graph import BlockGraph
from synth.polarity import choose_polarity
from synth.transfer import Factor, TransferFunction
from tests.strategies import butterworth

F = Fraction


def low_pass(poles: np.ndarray, gain: float = 1.0) -> TransferFunction:
    """An all-pole low-pass of that gain at DC."""
    factors = [Factor.real(p.real) for p in poles if abs(p.imag) < 1e-9]
    factors += [Factor((F(1), F(-2 * p.real), F(abs(p) ** 2))) for p in poles if p.imag > 1e-9]
    last = math.prod(f.coefficients[-1] for f in factors)
    return TransferFunction.from_factors(F(gain) * last, [], factors)


def chebyshev(order: int, ripple_db: float) -> TransferFunction:
    return low_pass(scipy.signal.cheb1ap(order, ripple_db)[1])


def bessel(order: int) -> TransferFunction:
    return low_pass(scipy.signal.besselap(order)[1])


@st.composite
def low_passes(draw: st.DrawFn) -> TransferFunction:
    """Poles of any Q up to 20 anywhere in six decades or crowded in half a decade."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    order = draw(st.integers(1, 12))
    decades = draw(st.sampled_from([6.0, 2.0, 0.5]))
    factors: list[Factor] = []
    while (left := order - sum(f.degree for f in factors)) > 0:
        frequency = float(2 * math.pi * 0.1 * 10 ** rng.uniform(0, decades))
        if left >= 2 and rng.random() < 0.5:
            factors.append(Factor.pair(frequency, float(rng.uniform(0.52, 20))))
        else:
            factors.append(Factor.real(-frequency))
    last = math.prod(f.coefficients[-1] for f in factors)
    return TransferFunction.from_factors(F(float(rng.uniform(-10, 10))) * last, [], factors)


def published(target: TransferFunction, corner: float = 1.0) -> list[float]:
    """Element values at `corner` [rad/s], and the termination."""
    ladder = matched_ladder(target.denominator)
    return [g * corner / ladder.frequency for g in ladder.elements] + [ladder.termination]


@pytest.mark.parametrize("order", range(1, 13))
def test_butterworth_has_the_elements_of_the_handbooks(order: int) -> None:
    """g_k = 2 sin((2k - 1) pi / 2n) between equal resistors (Zverev, Handbook of Filter
    Synthesis, from memory): 1, 2, 1 of third order, 0.618, 1.618, 2, 1.618, 0.618 of fifth; from
    poles in doubles, whose rounding alone would move them by percents."""
    wanted = [2 * math.sin((2 * k - 1) * math.pi / (2 * order)) for k in range(1, order + 1)]
    found = published(low_pass(scipy.signal.buttap(order)[1]))
    np.testing.assert_allclose(found, [*wanted, 1.0], rtol=1e-12)
    if order == 5:
        np.testing.assert_allclose(found[:5], [0.618, 1.618, 2, 1.618, 0.618], atol=5e-4)


@pytest.mark.parametrize("ripple_db", [0.01, 0.5, 3.0])
@pytest.mark.parametrize("order", range(1, 13))
def test_chebyshev_has_the_elements_of_the_closed_form(order: int, ripple_db: float) -> None:
    """g_1 = 2 a_1 / gamma, g_k = 4 a_{k-1} a_k / (b_{k-1} g_{k-1}) (Matthaei, Young and Jones,
    Microwave Filters, 1964, from memory), with the last resistor coth^2(beta/4) of an even
    order; 0.5 dB of third order: 1.5963, 1.0967, 1.5963 (Zverev, from memory)."""
    epsilon = math.sqrt(10 ** (ripple_db / 10) - 1)
    gamma = math.sinh(math.asinh(1 / epsilon) / order)
    a = [math.sin((2 * k - 1) * math.pi / (2 * order)) for k in range(1, order + 1)]
    b = [gamma**2 + math.sin(k * math.pi / order) ** 2 for k in range(1, order + 1)]
    wanted = [2 * a[0] / gamma]
    for k in range(1, order):
        wanted.append(4 * a[k - 1] * a[k] / (b[k - 1] * wanted[-1]))
    square = 1 if order % 2 else (epsilon + math.sqrt(1 + epsilon**2)) ** 2
    found = published(chebyshev(order, ripple_db))
    if order % 2 == 0:
        square = 1 / square
    np.testing.assert_allclose(found, [*wanted, square], rtol=1e-9)
    if (order, ripple_db) == (3, 0.5):
        np.testing.assert_allclose(found[:3], [1.5963, 1.0967, 1.5963], atol=5e-5)


@settings(deadline=None, derandomize=True, max_examples=60)
@given(low_passes())
def test_every_all_pole_low_pass_comes_back(target: TransferFunction) -> None:
    """Orders 1 to 12, gains of both signs, peaks far above DC: to 1e-12 over nine decades, and
    every element positive."""
    s = 2j * np.pi * np.geomspace(0.01, 1e7, 200)
    graph = realize(target, "leapfrog")
    np.testing.assert_allclose(graph.at(s), target.at(s), rtol=1e-12)
    ladder = matched_ladder(target.denominator)
    assert all(g > 0 for g in (*ladder.elements, ladder.termination))


@pytest.mark.parametrize("order", [2, 3, 6, 12])
def test_repeated_poles_come_back(order: int) -> None:
    target = TransferFunction.from_factors(1, [], [Factor.real(F(-1))] * order)
    s = 1j * np.geomspace(1e-3, 1e3, 50)
    np.testing.assert_allclose(realize(target, "leapfrog").at(s), target.at(s), rtol=1e-12)


@pytest.mark.parametrize("digits", [4, 9, 12, 13, 14, 15, 17])
@pytest.mark.parametrize("order", [2, 4, 6, 11])
def test_rounded_coefficients_give_a_ladder_too(order: int, digits: int) -> None:
    """Butterworth and Chebyshev of a few digits are no longer quite flat, their ladders no
    longer quite symmetric, but the response is that of the coefficients given."""
    s = 1j * np.geomspace(1e-3, 1e3, 50)
    for poles in (scipy.signal.buttap(order)[1], scipy.signal.cheb1ap(order, 0.01)[1]):
        rounded = [float(f"{c:.{digits}g}") for c in np.real(np.poly(poles))]
        target = TransferFunction.from_polynomials([rounded[-1]], rounded)
        assert np.all(target.poles.real < 0)
        np.testing.assert_allclose(realize(target, "leapfrog").at(s), target.at(s), rtol=1e-12)


@pytest.mark.parametrize("make", [lambda n: chebyshev(n, 0.5), bessel])
@pytest.mark.parametrize("order", [2, 3, 5, 8])
def test_the_ladder_is_lossless_and_matched(
    make: Callable[[int], TransferFunction], order: int
) -> None:
    """Computed element by element: input impedance, reflection and power into the termination
    add up to what is available, and |H| largest is full power."""
    target = make(order)
    ladder = matched_ladder(target.denominator)
    w = np.linspace(0, 2, 4001)
    z = np.full(w.shape, ladder.termination, complex)
    for k, g in enumerate(reversed(ladder.elements)):
        z = (z if k == 0 else 1 / z) + 1j * w / ladder.frequency * g
    power = 1 - np.abs((z - 1) / (z + 1)) ** 2
    size = np.abs(target.at(1j * w)) ** 2
    np.testing.assert_allclose(power, size / np.max(size), rtol=1e-5, atol=1e-12)
    assert np.max(power) == pytest.approx(1, abs=1e-6)


def slope(graph: BlockGraph, s: complex, scale: Callable[[str, str], float]) -> float:
    """d ln|H| for the weights multiplied by exp(t scale(block, source)), at t = 0."""

    def moved(t: float) -> float:
        blocks = tuple(
            replace(
                b,
                terms=tuple(
                    replace(x, weight=float(x.weight) * math.exp(t * scale(b.name, x.source)))
                    for x in b.terms
                ),
            )
            for b in graph.blocks
        )
        return math.log(abs(complex(replace(graph, blocks=blocks).at(s))))

    return (moved(1e-4) - moved(-1e-4)) / 2e-4


@pytest.mark.parametrize(
    ("target", "matched"),
    [
        (butterworth(5, 1e3), [0.0]),
        (chebyshev(5, 0.5), [0.0, math.cos(0.3 * math.pi), math.cos(0.1 * math.pi)]),
        (chebyshev(4, 1.0), [math.cos(math.pi / 8), math.cos(3 * math.pi / 8)]),
        (bessel(4), [0.0]),
    ],
)
def test_at_full_power_no_element_counts(target: TransferFunction, matched: list[float]) -> None:
    """Orchard's argument (1966, from memory): the power cannot rise above what is available, so
    where all of it arrives |H| does not change to first order with any capacitor; a coupling
    changes the gain alone, by half of itself, as an ideal transformer there would."""
    graph = realize(target, "leapfrog")
    n = target.order
    for w in matched:
        s = 1j * w
        for k in range(1, n + 1):
            name = f"x{k}"
            assert slope(graph, s, lambda b, _, name=name: float(b == name)) == pytest.approx(
                0, abs=1e-6
            )
            if k < n:
                pair = {(f"x{k + 1}", name): 0.5, (name, f"x{k + 1}"): -0.5}
                for (b, a), wanted in pair.items():
                    found = slope(graph, s, lambda y, x, b=b, a=a: float((y, x) == (b, a)))
                    assert found == pytest.approx(wanted, abs=1e-6)


def test_between_them_elements_do_count() -> None:
    """The test above can fail: at the bottom of a ripple the sensitivity is not zero."""
    graph = realize(chebyshev(5, 0.5), "leapfrog")
    s = 1j * math.cos(0.2 * math.pi)
    assert abs(slope(graph, s, lambda b, _: float(b == "x3"))) > 0.05


@pytest.mark.parametrize(("order", "inverters"), [(2, 1), (3, 1), (4, 2), (5, 2), (6, 3), (8, 4)])
def test_alternate_states_are_inverted(order: int, inverters: int) -> None:
    """One inverter for each pair of integrators, where the sign of the output is free."""
    graph = realize(butterworth(order, 1e3), "leapfrog")
    assert len(graph.blocks) == order
    assert len(choose_polarity(graph, inverted="either").inverters) == inverters


@pytest.mark.parametrize(
    ("numerator", "denominator", "message"),
    [
        ([1, 0], [1, 1, 1], "needs an all-pole low-pass H.s., got one with a zero"),
        ([1, 0, 4], [1, 3, 3, 1], "got one with 2 zeros"),
        ([1], [1, 1, 0], "poles in the left half-plane, got poles on the axis"),
        ([1], [1, 0, 1], "poles on the axis"),
        ([1], [1, -1, 1], "poles in the right half-plane"),
    ],
)
def test_anything_else_is_refused_with_the_reason(
    numerator: list[int], denominator: list[int], message: str
) -> None:
    with pytest.raises(RealizationError, match=rf"^board.form: the leapfrog .*{message}"):
        realize(TransferFunction.from_polynomials(numerator, denominator), "leapfrog")
