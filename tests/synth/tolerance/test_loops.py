"""The loop around many boards at once, against each loop on its own."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.job import Loop
from synth.loop import loop_margins
from synth.nodal import compile_circuit
from synth.population import Population
from synth.tolerance import BoardSource, board_margins, loop_yield_check, run_loops
from synth.tolerance.drawing import Drawn
from synth.transfer import Factor, TransferFunction
from tests.circuits import figures, tow_thomas

RESISTANCE, CAPACITANCE = 10e3, 1.59e-9
W0 = 1 / (RESISTANCE * CAPACITANCE)
NAMES = (
    "crossover_hz",
    "phase_margin_deg",
    "gain_margin_db",
    "disk_margin",
    "unstable_poles",
)
SEED = 5
OP_AMPS_SPREAD = Population(gain_bandwidth_spread=0.6)


def resonator(q: float):
    """A two-integrator section and the H(s) it is close to."""
    circuit = tow_thomas(figures(gain_bandwidth=1e8), damping=q * RESISTANCE)
    sign = np.sign(compile_circuit(circuit).solve([1.0])[0].real)
    return circuit, TransferFunction.from_factors(sign * W0**2, (), [Factor.pair(W0, q)])


def spread(circuit, boards: int):
    """So many boards whose op-amps spread too."""
    return BoardSource(circuit, OP_AMPS_SPREAD, SEED).draw(boards)


def one_by_one(circuit, loop, target, drawn, *, sign=1.0):
    """The same from `loop_margins` with the circuit of each board, shape (5, boards)."""
    programs = [compile_circuit(made) for made in circuits_of(circuit, drawn)]
    found = [loop_margins(loop, target, lambda f, p=p: sign * p.solve(f)) for p in programs]
    return np.array([[np.nan if getattr(m, n) is None else getattr(m, n) for m in found]
                     for n in NAMES], dtype=float)  # fmt: skip


def circuits_of(circuit, drawn):
    """The circuit of each board, with its own values and figures."""
    refs = [p.ref for p in circuit.passives]
    for k, values in enumerate(drawn.values):
        made = circuit.with_values(dict(zip(refs, values, strict=True)))
        if drawn.gain_bandwidth is not None:
            made = replace(
                made,
                amplifiers=tuple(
                    replace(amp, figures=replace(amp.figures, gain_bandwidth=float(figure)))
                    for amp, figure in zip(made.amplifiers, drawn.gain_bandwidth[k], strict=True)
                ),
            )
        yield made


PLANTS = {
    "an integrator": ([3e4], [1, 0], 0.0),
    "a delayed integrator": ([2e4], [1, 0], 8e-6),
    "one that some boards cannot hold": ([1.0], [1], 0.0),
    "a delayed gain": ([0.6], [1], 3e-6),
    "an unstable one": ([4e4], [1, -1e4], 0.0),
    "a resonance": ([2e9], [1, 200, 1e9], 0.0),
    "a small gain": ([0.01], [1], 0.0),
    "one that blocks DC": ([1e-4, 0], [1e-5, 1], 0.0),
}


@pytest.mark.parametrize("name", PLANTS)
@pytest.mark.parametrize("q", [0.8, 12.0])
def test_margins_of_many_boards_are_those_of_each(name: str, q: float) -> None:
    """Crossings, margins and the count of unstable poles, with plants that leave none, some or
    all of the boards stable."""
    circuit, target = resonator(q)
    num, den, delay = PLANTS[name]
    loop = Loop(plant=TransferFunction.from_polynomials(num, den), delay=delay)
    drawn = spread(circuit, 12)
    found = board_margins(compile_circuit(circuit), loop, target, drawn)
    expected = one_by_one(circuit, loop, target, drawn)
    for name_of, wanted in zip(NAMES, expected, strict=True):
        np.testing.assert_allclose(
            getattr(found, name_of), wanted, rtol=3e-5, atol=1e-6, err_msg=name_of
        )
    np.testing.assert_array_equal(found.unstable_poles, expected[-1])


@pytest.mark.parametrize("q", [0.9, 5.0])
def test_a_loop_on_the_edge_splits_the_boards(q: float) -> None:
    """1 + L of the nominal board all but vanishes: the count still agrees board by board, and the
    share of stable boards is neither 0 nor 1.  Plant k / (1 + s/a): with the section's two poles
    the loop is of order three, and k at the limit of Routh's criterion."""
    circuit, target = resonator(q)
    a = W0 / 3
    # (s^2 + (W0/Q) s + W0^2)(s + a) + k a W0^2 = 0: limit (W0/Q + a)(W0^2 + a W0/Q) = a W0^2 (1+k).
    k = (W0 / q + a) * (W0**2 + a * W0 / q) / (a * W0**2) - 1
    sign = float(np.sign(target.gain))
    loop = Loop(plant=TransferFunction.from_polynomials([sign * k * a], [1, a]))
    drawn = spread(circuit, 60)
    found = board_margins(compile_circuit(circuit), loop, target, drawn)
    expected = one_by_one(circuit, loop, target, drawn)
    np.testing.assert_array_equal(found.unstable_poles, expected[-1])
    assert 5 < found.stable.sum() < 55
    np.testing.assert_allclose(found.disk_margin, expected[3], rtol=1e-3, atol=1e-9)


def test_a_run_counts_and_ranks_its_boards() -> None:
    """Percentiles are values of boards, by rank; a limit half of the boards keep halves them;
    an inverted board in the same loop is unstable or not as its own loop says."""
    circuit, target = resonator(0.8)
    program = compile_circuit(circuit)
    sign = float(np.sign(target.gain))
    loop = Loop(plant=TransferFunction.from_polynomials([sign * 3e4], [1, 0]))
    run = run_loops(program, circuit, loop, target, inverted=False, boards=40, seed=2)
    drawn = BoardSource(circuit, Population(), 2).draw(40)
    each = board_margins(program, loop, target, drawn)
    assert run.stable == run.passed == 40
    ordered = np.sort(each.phase_margin_deg)
    assert (run.phase_margin_deg.p5, run.phase_margin_deg.p50, run.phase_margin_deg.p95) == tuple(
        ordered[[1, 19, 37]]
    )
    limited = replace(loop, phase_margin_deg=float(ordered[19] + ordered[20]) / 2)
    half = run_loops(program, circuit, limited, target, inverted=False, boards=40, seed=2)
    assert (half.stable, half.passed) == (40, 20)
    assert (half.short_of_phase, half.short_of_gain) == (20, 0)
    assert half.low < half.share < half.high
    assert loop_yield_check(half).value == 50
    turned = run_loops(program, circuit, loop, target, inverted=True, boards=40, seed=2)
    nominal = Drawn(np.array([[p.value for p in circuit.passives]]))
    expected = one_by_one(circuit, loop, target, nominal, sign=-1.0)
    assert expected[-1] > 0
    assert turned.stable == turned.passed == 0
    assert (turned.short_of_phase, turned.short_of_gain) == (0, 0)
    assert turned.disk_margin.p95 == 0
    assert turned.phase_margin_deg.p95 < 0


def test_a_run_is_of_the_population_and_of_the_first_boards_of_its_seed() -> None:
    """A run in two blocks finds what the boards drawn at once have; op-amps that spread move the
    phase margin where they are slow."""
    circuit, target = resonator(0.8)
    slow = replace(
        circuit,
        amplifiers=tuple(
            replace(a, figures=replace(a.figures, gain_bandwidth=1e6)) for a in circuit.amplifiers
        ),
    )
    program = compile_circuit(slow)
    sign = float(np.sign(target.gain))
    loop = Loop(plant=TransferFunction.from_polynomials([sign * 3e4], [1, 0]))
    options = {"inverted": False, "boards": 520, "seed": SEED}
    found = run_loops(program, slow, loop, target, population=OP_AMPS_SPREAD, **options)
    drawn = BoardSource(slow, OP_AMPS_SPREAD, SEED).draw(700).part(slice(0, 520))
    each = np.sort(board_margins(program, loop, target, drawn).phase_margin_deg)
    np.testing.assert_allclose(
        [found.phase_margin_deg.p5, found.phase_margin_deg.p95], each[[25, 493]], rtol=1e-9
    )
    plain = run_loops(program, slow, loop, target, **options)
    assert plain.phase_margin_deg.p5 - found.phase_margin_deg.p5 > 0.1


def test_without_a_crossing_there_is_no_percentile() -> None:
    """A loop far below 1 on every board."""
    circuit, target = resonator(0.8)
    loop = Loop(plant=TransferFunction.from_polynomials([0.01], [1]), phase_margin_deg=60.0)
    run = run_loops(
        compile_circuit(circuit), circuit, loop, target, inverted=False, boards=10, seed=2
    )
    assert run.crossover_hz.p50 is None
    assert run.phase_margin_deg.p5 is None
    assert run.passed == run.stable == 10
    assert run.disk_margin.p5 > 1.9


def test_poles_of_h_on_the_imaginary_axis_leave_the_count_open() -> None:
    """As `loop_margins` says of one board; an open count is not a stable board."""
    circuit, _ = resonator(1e4)
    target = TransferFunction.from_factors(W0**2, (), [Factor.pair(W0, np.inf)])
    loop = Loop(plant=TransferFunction.from_polynomials([3e4], [1, 1e5]))
    drawn = spread(circuit, 3)
    found = board_margins(compile_circuit(circuit), loop, target, drawn)
    assert np.isnan(found.unstable_poles).all()
    assert not found.stable.any()
