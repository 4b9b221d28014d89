"""First-order spread against a run of boards and against a hand calculation."""

import math

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.errors import CircuitError
from synth.evidence import DB_PER_NEPER, response_error
from synth.grid import judging_frequencies
from synth.nodal import compile_circuit
from synth.tolerance import drawn_values, predicted_spread
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for
from tests.synth.nodal.boards import chain, integrator, op_amp


def test_spread_of_an_ideal_integrator_is_that_of_its_rc():
    """|H| = 1/(w R C): variance of ln|H| is (tol_R^2 + tol_C^2)/3, the phase stays."""
    circuit = integrator(op_amp(1e12, 1e9))
    spread = predicted_spread(compile_circuit(circuit).sensitivities([100.0, 1e3]), circuit)
    expected = DB_PER_NEPER * math.sqrt((0.01**2 + 0.05**2) / 3)
    np.testing.assert_allclose(spread.magnitude_db, expected, rtol=1e-6)
    np.testing.assert_allclose(spread.phase_deg, 0.0, atol=1e-5)


def test_spread_agrees_with_a_run_of_boards():
    """Independent of derivatives: the standard deviation over 4000 drawn boards; 1 % resistors
    and 5 % capacitors keep second-order effects near the statistical doubt."""
    circuit = chain(3, op_amp(), source=100.0)
    program, f = compile_circuit(circuit), np.geomspace(50.0, 3e3, 15)
    spread = predicted_spread(program.sensitivities(f), circuit)
    values = drawn_values(circuit, 4000, 2)
    error = response_error(program.solve(f, values=values), program.solve(f))
    np.testing.assert_allclose(spread.magnitude_db, error.magnitude_db.std(axis=0), rtol=0.06)
    np.testing.assert_allclose(spread.phase_deg, error.phase_deg.std(axis=0), rtol=0.06)


def test_sensitivities_of_another_circuit_are_refused():
    sensitivities = compile_circuit(integrator(op_amp())).sensitivities([1.0])
    with pytest.raises(CircuitError, match=r"got sensitivities to 2 parts and 1 op-amps, expected"):
        predicted_spread(sensitivities, chain(2, op_amp()))


def test_a_sketch_predicts_the_spread_at_a_sharp_resonance_in_a_wide_band():
    """The largest spread is that over every judged frequency, not over a thinned grid."""
    w0 = 2 * math.pi * 1e3
    target = TransferFunction.from_factors(w0 / 50, [Factor.real(0)], [Factor.pair(w0, 50)])
    job = job_for(target, (10.0, 1e5), input_peak=0.1)
    sketch = sketch_form(job, "cascade", judging_frequencies(target, job.signal.band_hz))
    near = 1e3 * np.linspace(0.97, 1.03, 2001)
    sensitivities = compile_circuit(sketch.circuit).sensitivities(near)
    spread = predicted_spread(sensitivities, sketch.circuit)
    assert sketch.spread_db == pytest.approx(np.max(spread.magnitude_db), rel=0.02)
    assert sketch.spread_deg == pytest.approx(np.max(spread.phase_deg), rel=0.02)
