"""The two checks: names, sizes, where, and what cannot pass."""

import numpy as np
import pytest

from netlist.comparison import compare
from synth.errors import SimulationFailedError
from synth.job import Accept

F = np.array([10.0, 100.0, 1000.0])
ACCEPT = Accept(magnitude_db=0.5, phase_deg=3.0)


def test_errors_are_the_largest_and_say_where():
    """+0.4 dB at 100 Hz, -5 degrees at 1 kHz: one passes, the other does not."""
    target = np.array([1.0, 2j, -3.0 + 0j])
    wrong = target * np.array([1.0, 10 ** (0.4 / 20), np.exp(-1j * np.radians(5))])
    magnitude, phase = compare(F, wrong, target, ACCEPT)
    assert (magnitude.name, magnitude.unit, magnitude.limit) == ("magnitude error", "dB", 0.5)
    assert (phase.name, phase.unit, phase.limit) == ("phase error", "deg", 3.0)
    np.testing.assert_allclose([magnitude.value, phase.value], [0.4, 5.0], rtol=1e-12)
    assert (magnitude.passed, phase.passed) == (True, False)
    assert (magnitude.note, phase.note) == ("largest at 100 Hz", "largest at 1000 Hz")


def test_phase_is_compared_modulo_a_turn():
    """-179 and +179 degrees are 2 degrees apart."""
    target = np.full(3, np.exp(1j * np.radians(-179.0)))
    _, phase = compare(F, np.full(3, np.exp(1j * np.radians(179.0))), target, ACCEPT)
    np.testing.assert_allclose(phase.value, 2.0, rtol=1e-9)
    assert phase.passed


def test_an_inverted_output_fails_the_phase_alone():
    target = np.array([1.0, 2j, -3.0 + 0j])
    magnitude, phase = compare(F, -target, target, ACCEPT)
    assert magnitude.passed
    assert not phase.passed
    np.testing.assert_allclose(phase.value, 180.0, rtol=1e-12)


@pytest.mark.parametrize("bad", [np.nan, np.inf, complex(np.nan, 1.0)])
def test_a_response_that_is_no_number_fails_both(bad):
    target = np.ones(3, dtype=complex)
    simulated = target.copy()
    simulated[1] = bad
    for check in compare(F, simulated, target, ACCEPT):
        assert not check.passed
        assert check.value is None
        assert check.note == "largest at 100 Hz"


def test_a_silent_output_fails():
    magnitude, _ = compare(F, np.zeros(3, dtype=complex), np.ones(3, dtype=complex), ACCEPT)
    assert not magnitude.passed


def test_responses_of_other_points_are_refused():
    with pytest.raises(SimulationFailedError, match="the same points"):
        compare(F, np.ones(2, dtype=complex), np.ones(3, dtype=complex), ACCEPT)
    with pytest.raises(SimulationFailedError, match="the same points"):
        empty = np.ones(0, dtype=complex)
        compare(F[:0], empty, empty, ACCEPT)


def test_a_response_of_zero_has_no_phase_either():
    """Its angle in floating point is 0, which would pass."""
    target = np.array([1.0, 1.0, 1.0], dtype=complex)
    checks = compare(F, np.array([1.0, 0.0, 1.0], dtype=complex), target, Accept())
    assert [c.passed for c in checks] == [False, False]
    assert [c.value for c in checks] == [None, None]
