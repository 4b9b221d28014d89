"""Levels stay below their ceilings, parts within their ranges, and the error is least."""

from __future__ import annotations

import numpy as np
import pytest

from synth.candidates import choose_form
from synth.errors import RealizationError
from synth.evidence import response_error
from synth.forms import FORMS, realize
from synth.graph import Block, BlockGraph, Term
from synth.job import Job
from synth.mapping import Sizing, map_graph
from synth.nodal import compile_circuit
from synth.parts import PartRule, StockItem
from synth.peaks import SignalPeaks, signal_peaks
from synth.polarity import Polarity, choose_polarity
from synth.preferred import is_member
from synth.scaling import Scaled, scale
from synth.scaling.constraints import ceilings
from synth.scaling.objectives import current_shares, noise_power, response_error_power
from synth.scaling.signomial import Signomial
from synth.scaling.variables import Variables
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for
from tests.strategies import butterworth

BAND = (100.0, 2e3)
FREQUENCY = np.geomspace(*BAND, 60)


def stages(job: Job, form: str) -> tuple[BlockGraph, Polarity, SignalPeaks, Scaled]:
    graph = realize(job.target, form)
    polarity = choose_polarity(graph)
    peaks = signal_peaks(graph, job.target, band_hz=job.signal.band_hz, swing=job.signal.swing)
    return graph, polarity, peaks, scale(graph, polarity, job, peaks, FREQUENCY)


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("swing", ["sine", "any"])
@pytest.mark.parametrize("order", [1, 2, 3, 5, 8])
def test_levels_parts_and_response_hold(form: str, swing: str, order: int) -> None:
    """No internal peak above its ceiling, every R and C within range, H(s) unchanged."""
    job = job_for(butterworth(order, 1e3), BAND, swing=swing, input_peak=4.0)
    graph, polarity, peaks, scaled = stages(job, form)
    tops = ceilings(job, peaks)
    for name, level in scaled.levels.items():
        if name != graph.output:
            assert level <= tops[name] * 1.0001
    s = 2j * np.pi * FREQUENCY
    np.testing.assert_allclose(scaled.graph.at(s), job.target.at(s), rtol=1e-9)
    circuit = map_graph(scaled.graph, polarity, scaled.sizing, job)
    for part in circuit.bought:
        assert part.rule is not None
        assert part.rule.smallest * 0.9999 <= part.value <= part.rule.largest * 1.0001
        if part.kind == "capacitor":
            assert is_member("E12", part.value)


@pytest.mark.parametrize("form", FORMS)
def test_predicted_error_is_that_of_the_nodal_engine(form: str) -> None:
    """The first-order error of ln H from finite gain agrees with the whole circuit solved."""
    job = job_for(butterworth(4, 1e3), BAND)
    _, polarity, _, scaled = stages(job, form)
    circuit = map_graph(scaled.graph, polarity, scaled.sizing, job)
    response = compile_circuit(circuit).solve(FREQUENCY)
    error = response_error(response, job.target.response(FREQUENCY))
    assert error.rms == pytest.approx(scaled.predicted_error, rel=0.02)


def test_noise_objective_is_that_of_the_nodal_engine() -> None:
    """Without inverters the noise power of the graph is that of the circuit, current noise
    set to zero."""
    target = TransferFunction.from_factors(2e7, [], [Factor.real(-6e3), Factor.real(-2e3)])
    job = job_for(target, BAND, op_amp_figures={"current_noise": 0.0, "gain_bandwidth": 1e9})
    graph, polarity, _, scaled = stages(job, "cascade")
    assert not polarity.inverters
    circuit = map_graph(scaled.graph, polarity, scaled.sizing, job)
    fine = np.geomspace(*BAND, 400)
    variables = Variables(graph)
    v = np.zeros(variables.count)
    for block in graph.blocks:
        place = variables.level_place(block.name)
        if place is not None:
            v[place] = np.log(scaled.levels[block.name])
        v[variables.size_place(block.name)] = np.log(scaled.sizing.capacitors[block.name])
    predicted, _ = noise_power(variables, job.board.op_amp, fine)(v)
    noise = compile_circuit(circuit).noise(fine)
    assert predicted == pytest.approx(np.trapezoid(noise.total, fine), rel=2e-3)


def test_predicted_error_counts_an_inverter_at_the_output() -> None:
    """The board's output may be that of an inverter, whose error is its own; every target of
    either sign, against the whole circuit solved."""
    seen = 0
    for order in (1, 2, 3):
        for form in FORMS:
            for target in (butterworth(order, 1e3), butterworth(order, 1e3).negated()):
                job = job_for(target, BAND)
                _, polarity, _, scaled = stages(job, form)
                seen += polarity.output_from_inverter
                circuit = map_graph(scaled.graph, polarity, scaled.sizing, job)
                response = compile_circuit(circuit).solve(FREQUENCY)
                error = response_error(response, target.response(FREQUENCY))
                assert error.rms == pytest.approx(scaled.predicted_error, rel=0.02)
    assert seen


def test_noise_of_adders_is_that_of_the_nodal_engine() -> None:
    """An adder behind a lossy integrator, all of them inverting as the signs want it."""
    x = Block("x1", "integrator", (Term("in", -9e3), Term("x1", -4e3)))
    y = Block("y", "adder", (Term("x1", -1.7), Term("in", -0.6)))
    graph = BlockGraph("test", (x, y), "y")
    polarity = choose_polarity(graph)
    assert not polarity.inverters
    job = job_for(
        butterworth(1, 1e3),
        BAND,
        op_amp_figures={"current_noise": 0.0, "gain_bandwidth": 1e10, "open_loop_gain": 1e9},
    )
    variables = Variables(graph)
    fine = np.geomspace(*BAND, 400)
    for level, c, r in ((1.0, 4.7e-9, 14e3), (0.3, 1e-8, 90e3)):
        v = np.zeros(variables.count)
        place = variables.level_place("x1")
        assert place is not None
        v[[place, variables.size_place("x1"), variables.size_place("y")]] = np.log([level, c, r])
        sizing = Sizing(capacitors={"x1": c}, feedback={"y": r}, inverters=1e4)
        circuit = map_graph(graph.rescaled({"x1": level}), polarity, sizing, job)
        noise = compile_circuit(circuit).noise(fine)
        predicted, _ = noise_power(variables, job.board.op_amp, fine)(v)
        assert predicted == pytest.approx(np.trapezoid(noise.total, fine), rel=2e-3)


def test_currents_are_bounded_by_the_sum_of_what_hangs_on_an_output() -> None:
    """Feedback, reader, capacitor and load by hand, at a level of 0.5."""
    x = Block("x1", "integrator", (Term("in", -9e3), Term("x1", -3e3)))
    y = Block("y", "adder", (Term("x1", -2.0),))
    graph = BlockGraph("test", (x, y), "y")
    variables = Variables(graph)
    peaks = SignalPeaks(
        peak={"x1": 3.0, "y": 6.0},
        peak_hz={"x1": None, "y": None},
        rate={"x1": 8e3, "y": 1.6e4},
        norm="Linf",
        from_hz=None,
    )
    amp = job_for(butterworth(1, 1e3), BAND).board.op_amp
    first, second = current_shares(variables, peaks, amp, input_peak=2.0, load=5e3)
    v = np.zeros(variables.count)
    place = variables.level_place("x1")
    assert place is not None
    v[[place, variables.size_place("x1"), variables.size_place("y")]] = np.log([0.5, 1e-8, 2e4])
    # x1: 3 V, R_f = 1/(3e3 C), the resistor of y = 2e4/(2/0.5), C; y: 12 V, R_f, load.
    expected = 3.0 * 3e3 * 1e-8 + 3.0 / 5e3 + 2.0 * 0.5 * 8e3 * 1e-8
    assert first(v)[0] * amp.output_current == pytest.approx(expected, rel=1e-9)
    assert second(v)[0] * amp.output_current == pytest.approx(12 / 2e4 + 12 / 5e3, rel=1e-9)


def test_no_other_level_gives_a_smaller_error_than_allowed() -> None:
    """With a slow op-amp the chosen levels are within a tenth of the least error that a
    thousand random levels below the ceilings reach."""
    job = job_for(butterworth(3, 1e3), BAND, op_amp_figures={"gain_bandwidth": 2e5})
    graph, polarity, peaks, scaled = stages(job, "controllable")
    variables = Variables(graph)
    error = response_error_power(variables, polarity, job.board.op_amp, FREQUENCY)
    rng = np.random.default_rng(2)
    least = np.inf
    tops = ceilings(job, peaks)
    for _ in range(1000):
        v = np.zeros(variables.count)
        for block in graph.blocks:
            place = variables.level_place(block.name)
            if place is not None:
                v[place] = np.log(tops[block.name]) + rng.uniform(-4, -0.11)
        least = min(least, error(v)[0])
    assert scaled.predicted_error**2 <= 1.25 * least


def test_signomial_gradient_is_the_slope_of_its_value() -> None:
    """Central differences agree with the gradient."""
    rng = np.random.default_rng(1)
    f = Signomial(rng.normal(size=5), rng.normal(size=(5, 3)))
    v = rng.normal(size=3)
    _, gradient = f(v)
    for k in range(3):
        step = np.zeros(3)
        step[k] = 1e-5
        slope = (f(v + step)[0] - f(v - step)[0]) / 2e-5
        assert gradient[k] == pytest.approx(slope, rel=1e-6, abs=1e-9)


def test_a_job_that_fits_nowhere_is_refused_with_the_numbers() -> None:
    """A range of two values leaves no room, whatever the levels."""
    narrow = PartRule(kind="resistor", series="E96", tolerance=0.01, smallest=9.9e3, largest=10.3e3)
    job = job_for(butterworth(3, 1e3), BAND, resistors=narrow)
    with pytest.raises(RealizationError, match=r"board.resistors: .* would need resistors from"):
        stages(job, "controllable")


def test_the_refusal_of_all_forms_for_one_reason_says_it_once() -> None:
    """A pole at 0.01 Hz: every form is the same integrator, whose parts are named as bought."""
    target = TransferFunction.from_factors(0.0628, [], [Factor.real(-0.0628)])
    with pytest.raises(RealizationError) as caught:
        choose_form(job_for(target, (1e-3, 1.0)), np.geomspace(1e-3, 1.0, 50))
    said = str(caught.value)
    assert said.count("would need resistors of") == 1
    assert f"{', '.join(FORMS)}: " in said
    assert "allowed are 1 kohm to 1 Mohm and 100 pF to 1 uF" in said


def test_internal_outputs_keep_half_the_slew_rate() -> None:
    """With a slow op-amp the internal levels are set by the slew rate, not by the rail."""
    slow = {"slew_rate": 2e4}
    job = job_for(butterworth(3, 1e3), BAND, op_amp_figures=slow, input_peak=1.0)
    graph, _, peaks, scaled = stages(job, "controllable")
    for block in graph.blocks:
        if block.name != graph.output:
            assert scaled.levels[block.name] * peaks.rate[block.name] <= 1e4 * 1.001


def test_a_drawer_that_fits_nowhere_is_named_as_such() -> None:
    """The key is that of the drawer, and the advice too."""
    stock = (StockItem(value=10e3, tolerance=0.01), StockItem(value=11e3, tolerance=0.01))
    drawer = PartRule(
        kind="resistor", series="E96", tolerance=0.01, smallest=1e3, largest=1e6, stock=stock
    )
    job = job_for(butterworth(3, 1e3), BAND, resistors=drawer)
    with pytest.raises(RealizationError, match=r"board.stock: no scaling fits: .* to the drawer"):
        stages(job, "controllable")
