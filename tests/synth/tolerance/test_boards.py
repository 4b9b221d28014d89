"""Runs of boards: the count, the percentiles, and that a seed means one set of boards."""

import subprocess
import sys

import numpy as np
import pytest

from synth.circuit import Circuit
from synth.errors import CircuitError, JobError
from synth.evidence import response_error
from synth.job import Accept
from synth.nodal import compile_circuit
from synth.population import Population
from synth.tolerance import BoardSource, drawn_values, percentiles, run_boards, tolerances_of
from synth.tolerance import boards as boards_module
from tests.synth.nodal.boards import capacitor, chain, op_amp, resistor

BAND = np.geomspace(20.0, 2e3, 31)
LIMITS = Accept(magnitude_db=0.4, phase_deg=3.0)


def low_pass(resistance=10e3, capacitance=10e-9):
    return Circuit(
        passives=(
            resistor("R1", "in", "out", resistance),
            capacitor("C1", "out", "0", capacitance),
        ),
        amplifiers=(),
    )


def run(circuit, *, boards=700, seed=3, **options):
    program = compile_circuit(circuit)
    arguments = {"accept": LIMITS} | options
    return run_boards(
        program, circuit, program.solve(BAND), BAND, boards=boards, seed=seed, **arguments
    )


def test_count_and_percentiles_equal_those_of_a_plain_loop_over_boards():
    """A second method: the boards' circuits one by one, numpy's own percentiles."""
    circuit = chain(3, op_amp(), source=100.0, load=2e3)
    result = run(circuit, boards=120)
    target = compile_circuit(circuit).solve(BAND)
    refs = [p.ref for p in circuit.passives]
    values = drawn_values(circuit, 120, 3)
    errors = [
        response_error(
            compile_circuit(circuit.with_values(dict(zip(refs, v, strict=True)))).solve(BAND),
            target,
        )
        for v in values
    ]
    db = np.array([e.magnitude_db for e in errors])
    deg = np.array([e.phase_deg for e in errors])
    passed = (np.abs(db).max(axis=1) <= 0.4) & (np.abs(deg).max(axis=1) <= 3.0)
    assert 0 < result.passed < 120
    assert result.passed == passed.sum()
    for got, data, share in (
        (result.magnitude_5, db, 5),
        (result.magnitude_95, db, 95),
        (result.phase_5, deg, 5),
        (result.phase_95, deg, 95),
    ):
        np.testing.assert_allclose(got, np.percentile(data, share, axis=0), rtol=1e-5, atol=1e-6)
    assert result.error_95_db == pytest.approx(np.percentile(np.abs(db).max(axis=1), 95))
    assert result.low < result.share < result.high


@pytest.mark.parametrize("sigmas", [7.0, 0.0])
def test_neither_block_size_nor_memory_limit_changes_the_result(monkeypatch, sigmas):
    """Percentiles from what lies near them; with no room for chance (`sigmas` 0) most frequencies
    are lost and run again."""
    circuit = chain(2, op_amp())
    whole = run(circuit)
    monkeypatch.setattr(boards_module, "BLOCK", 37)
    monkeypatch.setattr(boards_module, "STORE", 8 * 700 * 4)
    monkeypatch.setattr(percentiles, "LEAST", 100)
    monkeypatch.setattr(percentiles, "STORE", 0)
    monkeypatch.setattr(percentiles, "SIGMAS", sigmas)
    parts = run(circuit)
    assert parts.passed == whole.passed
    for name in ("magnitude_5", "magnitude_95", "phase_5", "phase_95"):
        np.testing.assert_allclose(getattr(parts, name), getattr(whole, name), rtol=1e-6, atol=1e-9)
    assert parts.error_95_db == pytest.approx(whole.error_95_db, rel=1e-12)


def test_a_frequency_at_which_the_target_is_nothing_has_no_percentiles(monkeypatch):
    """No board has a relative error there, and the other frequencies do not notice."""
    monkeypatch.setattr(percentiles, "LEAST", 100)
    monkeypatch.setattr(percentiles, "STORE", 0)
    circuit = low_pass()
    program = compile_circuit(circuit)
    target = program.solve(BAND)
    target[3] = 0.0
    with np.errstate(invalid="ignore"):  # 1 / 0 of a complex number
        found = run_boards(program, circuit, target, BAND, accept=LIMITS, boards=700, seed=3)
    assert not np.isfinite(found.magnitude_95[3])
    others = np.delete(np.arange(BAND.size), 3)
    np.testing.assert_array_equal(found.phase_5[others], run(circuit).phase_5[others])


def test_a_seed_means_one_sequence_of_boards():
    circuit = chain(2, op_amp())
    few = drawn_values(circuit, 5, 8)
    many = drawn_values(circuit, 50, 8)
    np.testing.assert_array_equal(many[:5], few)
    assert run(circuit, seed=8).passed == run(circuit, seed=8).passed
    assert run(circuit, seed=8).error_95_db != run(circuit, seed=9).error_95_db


def test_parts_are_uniform_within_tolerance_and_fixtures_stay():
    circuit = chain(2, op_amp(), source=50.0, load=1e3)
    nominal = np.array([p.value for p in circuit.passives])
    deviation = drawn_values(circuit, 4000, 1) / nominal - 1
    tolerance = tolerances_of(circuit)
    fixed = np.array([not p.on_board for p in circuit.passives])
    np.testing.assert_array_equal(deviation[:, fixed], 0.0)
    assert np.all(np.abs(deviation) <= tolerance + 1e-15)
    np.testing.assert_allclose(
        deviation.std(axis=0)[~fixed], tolerance[~fixed] / np.sqrt(3), rtol=0.04
    )


def test_corner_of_an_rc_reaches_its_published_extremes():
    """Worst case of f = 1/(2 pi R C) (recomputed): 1 % and 1 %: -1.970 and +2.030 %;
    1 % and 5 %: -5.705 and +6.326 %.  H = 1/(1 + j f/fc) gives fc back."""
    program, nominal = compile_circuit(low_pass()), np.array([10e3, 10e-9])
    f = 1000.0
    for tolerances, low, high in (((0.01, 0.01), -1.970, 2.030), ((0.01, 0.05), -5.705, 6.326)):
        signs = np.array([[a, b] for a in (-1, 1) for b in (-1, 1)])
        h = program.solve([f], values=nominal * (1 + signs * tolerances))[:, 0]
        corner = f / (1 / h).imag
        percent = 100 * (corner * 2 * np.pi * nominal.prod() - 1)
        assert percent.min() == pytest.approx(low, abs=5e-4)
        assert percent.max() == pytest.approx(high, abs=5e-4)


def test_no_drawn_board_lies_beyond_the_extremes_of_its_corner():
    program = compile_circuit(low_pass())
    values = drawn_values(low_pass(), 5000, 5)
    corner = 1000.0 / (1 / program.solve([1000.0], values=values)[:, 0]).imag
    percent = 100 * (corner * 2 * np.pi * 10e3 * 10e-9 - 1)
    assert -5.705 < percent.min() < -5.2
    assert 5.8 < percent.max() < 6.326


def test_phase_is_compared_modulo_a_turn():
    """A fourth-order low-pass passes 180 deg inside the band, where the angles of board and target
    have opposite signs on many boards; the errors stay small all the same."""
    circuit = chain(4, op_amp())
    angle = np.angle(compile_circuit(circuit).solve(BAND), deg=True)
    assert angle.min() < -150
    assert angle.max() > 150
    result = run(circuit, boards=200)
    assert max(np.abs(result.phase_5).max(), np.abs(result.phase_95).max()) < 20


def test_a_target_of_the_other_sign_is_half_a_turn_away():
    circuit = low_pass()
    program = compile_circuit(circuit)
    target = -program.solve(BAND)
    result = run_boards(program, circuit, target, BAND, accept=LIMITS, boards=50, seed=0)
    assert result.passed == 0
    assert np.abs(result.phase_95).min() > 170


def test_progress_ends_at_the_number_of_boards():
    seen = []
    run(chain(2, op_amp()), boards=1203, progress=lambda done, of: seen.append((done, of)))
    assert seen == [(500, 1203), (1000, 1203), (1203, 1203)]


def test_nonsense_is_refused_in_one_line():
    circuit = low_pass()
    with pytest.raises(JobError, match="boards: got 0 boards"):
        run(circuit, boards=0)
    with pytest.raises(JobError, match="seed: got the seed -1"):
        run(circuit, seed=-1)
    with pytest.raises(JobError, match="confidence of 2"):
        run(circuit, confidence=2)
    program = compile_circuit(circuit)
    with pytest.raises(CircuitError, match=r"target of shape \(2,\)"):
        run_boards(program, circuit, [1, 1], BAND, accept=LIMITS, boards=1, seed=0)
    with pytest.raises(CircuitError, match="program of another circuit"):
        run_boards(program, chain(2, op_amp()), BAND, BAND, accept=LIMITS, boards=1, seed=0)


def test_a_hundred_thousand_boards_stay_below_200_megabytes():
    """Peak of the whole process at 201 frequencies, percentiles included.  Its ru_maxrss would
    start at the size of the process that runs the tests, which it was forked from."""
    script = """
import re
from pathlib import Path
import numpy as np
from synth.job import Accept
from synth.nodal import compile_circuit
from synth.tolerance import boards, run_boards
from tests.synth.tolerance.test_boards import low_pass
circuit = low_pass()
program = compile_circuit(circuit)
f = np.geomspace(20, 2e4, 201)
run_boards(program, circuit, program.solve(f), f, accept=Accept(), boards=100_000, seed=1)
print(int(re.search(r"VmHWM:\\s*(\\d+) kB", Path("/proc/self/status").read_text())[1]) / 1024)
"""
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True, timeout=120
    )
    assert float(done.stdout) < 200


@pytest.mark.parametrize("spread", [0.0, 0.5])
@pytest.mark.parametrize("count", [3, 700])
def test_the_worst_boards_of_a_run_are_kept_with_their_values(count, spread, monkeypatch):
    """Against all boards drawn at once, op-amps that spread among them; neither order nor values
    hang on the size of a block."""
    circuit = chain(3, op_amp(), source=100.0)
    monkeypatch.setattr(boards_module, "BLOCK", 37)
    program = compile_circuit(circuit)
    target = program.solve(BAND)
    population = Population(gain_bandwidth_spread=spread)
    found = run(circuit, boards=count, population=population).worst
    drawn = BoardSource(circuit, population, 3).draw(count)
    values, speeds = drawn.values, drawn.gain_bandwidth
    error = response_error(program.solve(BAND, values=values, gain_bandwidth=speeds), target)
    share = np.maximum(
        np.abs(error.magnitude_db).max(axis=1) / LIMITS.magnitude_db,
        np.abs(error.phase_deg).max(axis=1) / LIMITS.phase_deg,
    )
    expected = np.argsort(-share)[:5]
    assert [board.number for board in found] == expected.tolist()
    np.testing.assert_allclose([board.limit_share for board in found], share[expected], rtol=1e-9)
    np.testing.assert_array_equal([board.values for board in found], values[expected])
    if spread:
        np.testing.assert_array_equal([b.gain_bandwidth for b in found], speeds[expected])
    else:
        assert all(board.gain_bandwidth is None for board in found)
