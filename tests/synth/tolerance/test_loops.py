"""The loop around many boards at once, against each loop on its own."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.job import Loop
from synth.loop import loop_margins
from synth.nodal import compile_circuit
from synth.population import Population
from synth.stability import poles_on_the_right, right_of_target
from synth.tolerance import BoardSource, board_margins, loop_yield_check, run_loops
from synth.tolerance import loops as loops_module
from synth.tolerance.drawing import Drawn
from synth.tolerance.loopblock import scanned_margins
from synth.tolerance.loopscan import KEPT, LoopScan
from synth.tolerance.loopsweep import LoopSweep
from synth.transfer import Factor, TransferFunction
from tests.circuits import figures, integrator, tow_thomas

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
    found = [
        loop_margins(loop, target, lambda f, p=p: sign * p.solve(f), excess=excess_of(p, target))
        for p in programs
    ]
    return np.array([[np.nan if getattr(m, n) is None else getattr(m, n) for m in found]
                     for n in NAMES], dtype=float)  # fmt: skip


def excess_of(program, target):
    """Poles right of the axis beyond those of H(s)."""
    right = int(poles_on_the_right(program.poles()[None], target)[0])
    return right - right_of_target(target)


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
    "a lossless resonance": ([2e9], [1, 0, 1e9], 0.0),
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


def edge(q: float):
    """A loop whose nominal board is all but on the edge, as above."""
    circuit, target = resonator(q)
    a = W0 / 3
    k = (W0 / q + a) * (W0**2 + a * W0 / q) / (a * W0**2) - 1
    plant = TransferFunction.from_polynomials([float(np.sign(target.gain)) * k * a], [1, a])
    return circuit, target, Loop(plant=plant)


def scan_of(circuit, loop, target, drawn):
    sweep = LoopSweep.of(compile_circuit(circuit), loop, target, 1.0)
    return LoopScan.of(sweep, drawn.part(slice(0, 20)))


@pytest.mark.parametrize("q", [0.7, 3.0, 14.0])
@pytest.mark.parametrize("gain", [0.3, 1.0])
def test_the_scan_knows_every_board_everywhere(q: float, gain: float) -> None:
    """Second method: boards solved at frequencies of no grid, all over the range.  What the scan
    says of ln H there is right to what it promises of every board it keeps."""
    circuit, target, loop = edge(q)
    numerator, denominator = loop.plant.numerator, loop.plant.denominator
    scaled = [gain * float(c) for c in numerator], [float(c) for c in denominator]
    plant = TransferFunction.from_polynomials(*scaled)
    drawn = spread(circuit, 60)
    scan = scan_of(circuit, Loop(plant=plant), target, drawn)
    apart = scan.apart(drawn)
    kept = np.flatnonzero(scan.follows(apart, scan.panels.high_orders(apart)))
    x = np.sort(np.random.default_rng(8).uniform(scan.x[0], scan.x[-1], 400))
    found = scan.panels.everywhere((apart + scan.nominal)[kept], x)
    exact = scan.sweep.boards(np.exp(x), drawn)[kept] / target.response(np.exp(x))
    error = np.abs(np.exp(found) / exact - 1)
    assert kept.size > 50
    assert np.all(error <= 3 * KEPT * scan.scale[scan.panels.panel_of(x)])


@pytest.mark.parametrize("q", [0.7, 3.0, 14.0])
def test_the_scan_counts_poles_as_the_dense_grid_does(q: float) -> None:
    """On the edge of stability, where nearly every board has its turns counted: the grid is the
    second method.  The scan follows its boards by itself."""
    circuit, target, loop = edge(q)
    drawn = spread(circuit, 300)
    scan = scan_of(circuit, loop, target, drawn)
    apart = scan.apart(drawn)
    assert scan.follows(apart, scan.panels.high_orders(apart)).mean() > 0.97
    found, expected = scanned_margins(scan, drawn), scan.sweep.margins(drawn)
    np.testing.assert_array_equal(found[4], expected[4])
    assert 0.05 < (found[4] == 0).mean() < 0.95
    np.testing.assert_allclose(found[2], expected[2], rtol=1e-3, atol=1e-3)


@pytest.mark.parametrize("gain", [0.9, 1.0, 1.1])
@pytest.mark.parametrize("delay", [0.0, 3e-6])
def test_a_pole_of_h_at_the_origin_is_counted_as_in_each_loop(gain: float, delay: float) -> None:
    """The finite gain of the op-amp moves it off; integrator and two lags at the limit of Routh,
    2 a = w0 k, of 0.9 to 1.1 times that gain."""
    resistance, capacitance = 10e3, 10e-9
    circuit = integrator(figures(gain_bandwidth=1e6, open_loop_gain=1e3), resistance, capacitance)
    target = TransferFunction.from_polynomials([-1 / (resistance * capacitance)], [1, 0])
    a = 0.3 / (resistance * capacitance)
    k = -2 * a * resistance * capacitance * gain
    loop = Loop(
        plant=TransferFunction.from_polynomials([k * a * a], [1, 2 * a, a * a]), delay=delay
    )
    drawn = spread(circuit, 12)
    scan = scan_of(circuit, loop, target, drawn)
    expected = one_by_one(circuit, loop, target, drawn)
    found = scanned_margins(scan, drawn)
    np.testing.assert_array_equal(found[4], expected[4])
    np.testing.assert_allclose(found[:4], expected[:4], rtol=1e-5, atol=1e-6)
    if gain != 1.0:
        assert set(found[4]) == ({0.0} if gain < 1 else {2.0})


def test_a_board_unlike_those_of_the_pilot_is_done_on_the_grid() -> None:
    """One resonance far from all others: the panels are not made for it, its own coefficients say
    so, and it comes out as on the grid, the others as if it was not there."""
    circuit, target = resonator(12.0)
    loop = Loop(plant=TransferFunction.from_polynomials([2e4], [1, 0]))
    drawn = spread(circuit, 40)
    far = drawn.values.copy()
    far[30] *= 1.35
    changed = Drawn(far, drawn.gain_bandwidth)
    scan = scan_of(circuit, loop, target, drawn)
    apart = scan.apart(changed)
    followed = scan.follows(apart, scan.panels.high_orders(apart))
    assert np.flatnonzero(~followed).tolist() == [30]
    found = scanned_margins(scan, changed)
    np.testing.assert_array_equal(
        found[:, 30], scan.sweep.margins(changed.part(slice(30, 31)))[:, 0]
    )
    others = np.arange(40) != 30
    np.testing.assert_allclose(
        found[:, others], scanned_margins(scan, drawn)[:, others], rtol=1e-9, atol=1e-9
    )


@pytest.mark.parametrize("gain", [1e-3, 0.5])
def test_boards_that_oscillate_by_themselves_are_counted(gain: float) -> None:
    """A Q of 25 with op-amps of 100 times the resonance, whose 1/Q less 4/100 is 0: some boards
    have their pair right of the axis, and a loop that hardly closes keeps it there.  That the
    closed loop is stable is for the poles of each board and its own curve."""
    circuit, target = resonator(25.0)
    slow = replace(
        circuit,
        amplifiers=tuple(
            replace(a, figures=replace(a.figures, gain_bandwidth=1e6)) for a in circuit.amplifiers
        ),
    )
    plant = TransferFunction.from_polynomials([float(np.sign(target.gain)) * gain], [1e-5, 1])
    loop, drawn = Loop(plant=plant), spread(slow, 40)
    program = compile_circuit(slow)
    found = board_margins(program, loop, target, drawn)
    expected = one_by_one(slow, loop, target, drawn)
    np.testing.assert_array_equal(found.unstable_poles, expected[-1])
    by_itself = np.array([excess_of(compile_circuit(c), target) for c in circuits_of(slow, drawn)])
    assert 0 < np.count_nonzero(by_itself) < 40
    if gain < 0.01:
        np.testing.assert_array_equal(found.unstable_poles, by_itself)
    np.testing.assert_array_equal(found.disk_margin > 0, found.stable)


@pytest.mark.parametrize("q", [0.8, 12.0])
def test_margins_do_not_hang_on_the_size_of_a_block(monkeypatch, q: float) -> None:
    """Places are looked at by bounds over a block: no board may lose a crossing to another."""
    circuit, target, loop = edge(q)
    drawn = spread(circuit, 90)
    program = compile_circuit(circuit)
    whole = board_margins(program, loop, target, drawn)
    monkeypatch.setattr(loops_module, "BLOCK", 7)
    parts = board_margins(program, loop, target, drawn)
    for name in NAMES:
        np.testing.assert_allclose(
            getattr(parts, name), getattr(whole, name), rtol=1e-9, atol=1e-9, err_msg=name
        )


def test_responses_too_sharp_for_a_scan_are_run_on_the_first_boards(monkeypatch) -> None:
    """At Q = 1000 no board is like another; the number of boards is said."""
    circuit, target = resonator(1e3)
    loop = Loop(plant=TransferFunction.from_polynomials([0.01], [1]))
    grid = LoopSweep.of(compile_circuit(circuit), loop, target, 1.0).grid
    monkeypatch.setattr(loops_module, "WORK", 3 * grid.size)
    options = {"inverted": False, "seed": SEED}
    run = run_loops(compile_circuit(circuit), circuit, loop, target, boards=8, **options)
    assert run.boards == 3
    few = run_loops(compile_circuit(circuit), circuit, loop, target, boards=2, **options)
    assert few.boards == 2
