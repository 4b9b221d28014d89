"""Values chosen for the op-amps there are: what it brings, against circuits made otherwise."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.allowance import op_amp_allowance
from synth.candidates import sketch_form
from synth.choosing import with_ideal_op_amps
from synth.design import design
from synth.errors import JobError
from synth.evidence import response_error
from synth.nodal import compile_circuit
from synth.results import ErrorFigures
from synth.values import ValueSearch, wanted_of
from tests.circuits import figures, tow_thomas
from tests.jobs import job_for
from tests.strategies import butterworth

BAND = (100.0, 2e3)
GAIN_BANDWIDTH = 1e6


@pytest.fixture(scope="module")
def made():
    slow = {"gain_bandwidth": GAIN_BANDWIDTH}
    job = job_for(butterworth(3, 1e3), BAND, form="controllable", op_amp_figures=slow)
    return design(job, boards=50)


def test_an_allowance_for_slow_op_amps_pays(made) -> None:
    """At 1 MHz the op-amps bend the response; the chosen values make up for most of it."""
    found = made.allowance
    assert found.with_allowance.rms < found.without_allowance.rms / 3
    assert found.with_allowance.rms == pytest.approx(made.nominal.rms, rel=1e-9)
    assert found.with_allowance.largest_db == pytest.approx(made.nominal.largest_db, rel=1e-9)
    assert found.with_allowance.largest_deg == pytest.approx(made.nominal.largest_deg, rel=1e-9)


def test_what_is_left_with_slower_and_faster_op_amps(made) -> None:
    """Second method: circuits whose op-amps have half and one and a half times the figure."""
    target = made.wanted.response(made.frequency_hz)
    for factor, found in (
        (made.allowance.slower_factor, made.allowance.slower),
        (made.allowance.faster_factor, made.allowance.faster),
    ):
        amplifiers = tuple(
            replace(a, figures=replace(a.figures, gain_bandwidth=factor * GAIN_BANDWIDTH))
            for a in made.circuit.amplifiers
        )
        other = compile_circuit(replace(made.circuit, amplifiers=amplifiers))
        error = response_error(other.solve(made.frequency_hz), target)
        assert found.rms == pytest.approx(error.rms, rel=1e-6)
        assert found.largest_db == pytest.approx(error.largest_db, rel=1e-6)
        assert found.largest_deg == pytest.approx(error.largest_deg, rel=1e-6)
        assert found.rms > made.nominal.rms
    assert (made.allowance.slower_factor, made.allowance.faster_factor) == (0.5, 1.5)


def test_values_chosen_without_allowance_are_judged_with_the_real_op_amps() -> None:
    """Whatever op-amps the second circuit carries itself."""
    circuit = tow_thomas(figures(gain_bandwidth=200e3))
    ideal = with_ideal_op_amps(circuit.with_values({"R2": 11e3}))
    frequency = np.geomspace(1e3, 20e3, 31)
    target = compile_circuit(with_ideal_op_amps(circuit)).solve(frequency)
    found = op_amp_allowance(circuit, ideal, target, frequency)
    judged = compile_circuit(circuit.with_values({"R2": 11e3})).solve(frequency)
    error = response_error(judged, target)
    assert found.without_allowance == ErrorFigures(
        rms=pytest.approx(error.rms, rel=1e-9),
        largest_db=pytest.approx(error.largest_db, rel=1e-9),
        largest_deg=pytest.approx(error.largest_deg, rel=1e-9),
    )
    assert found.without_allowance.rms > 1e-2


def test_the_choice_is_no_worse_than_the_one_without_allowance() -> None:
    """In the measure of the search, magnitude and phase weighted by their limits; op-amps that
    hardly show in the band leave nothing to make up for."""
    job = job_for(butterworth(2, 1e3), BAND, form="cascade")
    found = design(job, boards=50).allowance
    assert found.with_allowance.rms <= found.without_allowance.rms * 1.01


@pytest.mark.parametrize(("form", "seed"), [("cascade", 1), ("cascade", 2), ("tow_thomas", 1)])
def test_more_effort_than_usual_begins_with_what_the_usual_finds(form, seed, monkeypatch) -> None:
    """And is never worse, nor is a little more; the usual effort is a hundredth here."""
    usual = 1_000_000
    monkeypatch.setattr("synth.values.DEFAULT_EFFORT", usual)
    target = butterworth(4, 1e3)
    job = job_for(target, BAND, form=form)
    frequency = np.geomspace(*BAND, 60)
    sketch = sketch_form(job, form, frequency)
    response = wanted_of(sketch, job).response(frequency)

    def error(effort: int) -> float:
        search = ValueSearch(sketch, job, response, frequency, seed, effort)
        choice, _ = search.both(lambda stage, done, total: None)
        return float(choice.certificate.rms)

    one = error(usual)
    assert error(3 * usual) <= one * (1 + 1e-12)
    assert error(usual + 10) <= one * (1 + 1e-12)


def test_more_effort_is_never_worse_here_and_none_is_refused() -> None:
    """The effort is a multiple of the default work, and part of the result."""
    job = job_for(butterworth(1, 1e3), BAND, form="observable")
    one, two = (design(job, boards=20, effort=k) for k in (1, 2))
    assert (one.effort, two.effort) == (1, 2)
    assert two.certificate.rms <= one.certificate.rms * (1 + 1e-9)
    with pytest.raises(JobError, match=r"effort: got the effort 0, expected 0.01 or more"):
        design(job, effort=0)
