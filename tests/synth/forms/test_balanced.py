"""The balanced form: Gramians and Hankel values, what pruning leaves, and what it refuses."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
import scipy.signal

from synth.errors import RealizationError
from synth.forms.balanced import balanced, balanced_realization
from synth.graph import BlockGraph
from synth.statespace import StateSpace
from synth.transfer import Factor, TransferFunction
from tests.forms import largest_summand
from tests.strategies import butterworth

HZ = 2 * math.pi
LEAD_LAG = TransferFunction.from_factors(
    300 * HZ,
    [Factor.real(-2 * HZ), Factor.real(-8 * HZ)],
    [Factor.real(-0.25 * HZ), Factor.real(-60 * HZ), Factor.real(-600 * HZ)],
)


def of_roots(zeros: np.ndarray, poles: np.ndarray, gain: float) -> TransferFunction:
    """From the lists scipy designs, in kHz."""

    def factors(roots: np.ndarray) -> list[Factor]:
        w = 1e3 * HZ
        pairs = [Factor.pair(w * abs(r), -abs(r) / (2 * r.real)) for r in roots if r.imag > 1e-9]
        return pairs + [Factor.real(w * r.real) for r in roots if abs(r.imag) <= 1e-9]

    scale = (1e3 * HZ) ** (len(poles) - len(zeros))
    return TransferFunction.from_factors(gain * scale, factors(zeros), factors(poles))


def band_pass() -> TransferFunction:
    """Butterworth, order 6, 10 % bandwidth at 1 kHz."""
    return of_roots(*scipy.signal.lp2bp_zpk(*scipy.signal.buttap(3), wo=1.0, bw=0.1))


TARGETS = {
    "Butterworth 3": butterworth(3, 1e3),
    "Butterworth 4": butterworth(4, 1e3),
    "Butterworth 6": butterworth(6, 1e3),
    "Butterworth 8": butterworth(8, 1e3),
    "Butterworth high-pass 4": butterworth(4, 1e3, highpass=True),
    "Chebyshev 5": of_roots(*scipy.signal.cheb1ap(5, 0.5)),
    "band-pass 6": band_pass(),
    "lead-lag": LEAD_LAG,
}


def count(graph: BlockGraph) -> int:
    """How many coefficients are left of A, B, C."""
    return sum(1 for b in graph.blocks for t in b.terms if not t.sets.startswith("D,"))


@pytest.mark.parametrize("target", TARGETS.values(), ids=TARGETS)
def test_gramians_are_equal_and_diagonal(target: TransferFunction) -> None:
    """Both are the Hankel singular values on the diagonal to 1e-9 of the largest, by the
    Lyapunov solver of python-control, and the realization is H(s)."""
    found = balanced_realization(target)
    system, hankel = found.system, np.diag(found.hankel)
    P = control.lyap(system.A, np.outer(system.B, system.B), method="scipy")
    Q = control.lyap(system.A.T, system.C.T @ system.C, method="scipy")
    np.testing.assert_allclose(P, hankel, rtol=0, atol=1e-9 * hankel[0, 0])
    np.testing.assert_allclose(Q, hankel, rtol=0, atol=1e-9 * hankel[0, 0])
    assert np.all(np.diff(found.hankel) <= 0)
    s = 1j * np.geomspace(0.1, 10, 30)
    response = [system.C @ np.linalg.solve(x * np.eye(len(P)) - system.A, system.B) for x in s]
    response = np.array(response)[:, 0] + system.D[0]
    np.testing.assert_allclose(
        response, target.at(s * found.frequency), rtol=0, atol=1e-9 * np.max(np.abs(response))
    )


@pytest.mark.parametrize(
    ("target", "values"),
    [
        (TransferFunction.from_polynomials([1], [1, 2]), [0.25]),
        # Recomputed with scipy's Lyapunov solver; order 3 of Butterworth, corner 1 rad/s.
        (TransferFunction.from_polynomials([1], [1, 2, 2, 1]), [0.793128, 0.344030, 0.050901]),
    ],
)
def test_hankel_singular_values_are_those_known(
    target: TransferFunction, values: list[float]
) -> None:
    """1/(s + 2): P = 1/4, Q = 1/4 (algebra); and one of order 3."""
    found = balanced_realization(target).hankel
    np.testing.assert_allclose(found, values, rtol=0, atol=5e-7)


@pytest.mark.parametrize(
    ("name", "most"),
    [
        ("Butterworth 3", 12),
        ("Butterworth 4", 18),
        ("Butterworth 6", 29),
        ("Butterworth 8", 47),
        ("Chebyshev 5", 22),
        ("band-pass 6", 26),
        ("lead-lag", 11),
    ],
)
def test_pruning_leaves_few_coefficients(name: str, most: int) -> None:
    """At least 3 n - 1, which 2 n coefficients of H and n levels need; of n^2 + 2 n."""
    n = TARGETS[name].order
    assert 3 * n - 1 <= count(balanced(TARGETS[name])) <= most


@pytest.mark.parametrize("target", TARGETS.values(), ids=TARGETS)
def test_low_and_high_frequencies_are_right(target: TransferFunction) -> None:
    """At zero, and six decades below and above the roots, within 1e-9 of the largest summand;
    zeros at the origin and at infinity are sums that cancel."""
    graph = balanced(target)
    corners = np.abs([*target.poles, *target.zeros[np.abs(target.zeros) > 0]])
    s = 1j * np.array([0.0, 1e-6 * np.min(corners), 1e6 * np.max(corners)])
    error = np.abs(graph.at(s) - target.at(s))
    assert np.all(error <= 1e-9 * np.maximum(np.abs(target.at(s)), largest_summand(graph, s)))


@pytest.mark.parametrize("target", TARGETS.values(), ids=TARGETS)
def test_the_noise_measure_stays_near_the_least_there_is(target: TransferFunction) -> None:
    """sum sqrt(P_ii Q_ii) is at least the sum of the Hankel values, for every realization
    (Mullis and Roberts 1976, Hwang 1977, from memory), and here at most 5 % above."""
    graph = balanced(target)
    system = StateSpace.of_signals(graph, (graph.output,))
    P, Q = system.controllability_gramian(), system.observability_gramian()
    noise = np.sum(np.sqrt(np.diag(P) * np.diag(Q)))
    least = np.sum(balanced_realization(target).hankel)
    assert 1 - 1e-9 <= noise / least <= 1.05 + 1e-9


def test_states_of_like_hankel_values_do_not_mix_slow_and_fast() -> None:
    """The lead-lag with every coefficient off by up to 1 %: under 0.3 dB in 19 of 20 cases over
    its band, where the plain balanced realization scatters more than 3 dB."""

    def scatter(system: StateSpace, w: np.ndarray) -> float:
        rng = np.random.default_rng(1)

        def response(A: np.ndarray, B: np.ndarray, C: np.ndarray) -> np.ndarray:
            x = [np.linalg.solve(1j * v * np.eye(len(A)) - A, B) for v in w]
            return np.array(x) @ C[0]

        def off(values: np.ndarray) -> np.ndarray:
            return values * (1 + rng.uniform(-0.01, 0.01, values.shape))

        nominal = response(system.A, system.B, system.C)
        worst = [
            np.max(np.abs(20 * np.log10(np.abs(response(*map(off, parts)) / nominal))))
            for parts in [(system.A, system.B, system.C)] * 100
        ]
        return float(np.percentile(worst, 95))

    graph = balanced(LEAD_LAG)
    plain = balanced_realization(LEAD_LAG)
    w = HZ * np.geomspace(0.1, 500, 40)
    assert scatter(StateSpace.of_signals(graph, (graph.output,)), w) < 0.3
    assert scatter(plain.system, w / plain.frequency) > 3


@pytest.mark.parametrize(
    ("gain", "zeros", "poles"),
    [
        (1.0, [Factor.real(0)], [Factor.pair(1e3, 1000), Factor.pair(1.001e3, 1000)]),
        (1e6, [], [Factor.pair(1e3, 1e5)]),
        (1e18, [], [Factor.real(-1e3)] * 6),
        (1e12, [], [Factor.pair(1e3, 0.01), Factor.pair(2e3, 0.3)]),
        (
            1.0,
            [Factor.real(k * 1e3) for k in (1, 2, 3)],
            [Factor.real(-k * 1e3) for k in (1, 2, 3)],
        ),
        (1e32, [], [Factor.real(-1e10), Factor.pair(1e11, 3)]),
    ],
)
def test_extremes_are_held(gain: float, zeros: list[Factor], poles: list[Factor]) -> None:
    """High Q, poles that coincide, wide pairs of real poles, an all-pass, whose Hankel values
    are all one, and high frequencies: H(s) within 1e-10 of the largest summand."""
    target = TransferFunction.from_factors(gain, zeros, poles)
    graph = balanced(target)
    corners = np.abs(target.poles)
    s = 1j * np.geomspace(1e-4 * np.min(corners), 1e4 * np.max(corners), 150)
    size = np.maximum(np.abs(target.at(s)), largest_summand(graph, s))
    assert np.max(np.abs(graph.at(s) - target.at(s)) / size) < 1e-10


@pytest.mark.parametrize(
    "pole", [Factor.real(0), Factor.pair(1e3, math.inf), Factor.real(1e3), Factor.pair(-1e3, 1)]
)
def test_a_pole_on_or_right_of_the_axis_is_refused(pole: Factor) -> None:
    target = TransferFunction.from_factors(1, [], [Factor.real(-1e3), pole])
    with pytest.raises(RealizationError, match="needs every pole left of the imaginary axis"):
        balanced(target)


def test_hankel_values_too_far_apart_are_refused_with_the_numbers() -> None:
    """A section that adds 1e-10 of the rest, and poles that a double cannot hold together."""
    poles = [Factor.real(-1e3), Factor.real(-2e3)]
    faint = TransferFunction.from_factors(1e3, [Factor.real(-2e3 * (1 + 1e-10))], poles)
    with pytest.raises(
        RealizationError, match=r"spread over a ratio of \d.* at most 1e\+09, expected another form"
    ):
        balanced(faint)
    poles = [Factor.real(-1e-6), Factor.real(-1e6)]
    apart = TransferFunction.from_factors(1, [], poles)
    with pytest.raises(RealizationError, match=r"no nearer to the axis than .* got 1\.0e-12"):
        balanced(apart)
