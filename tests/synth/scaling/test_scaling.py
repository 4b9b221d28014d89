"""Levels stay below their ceilings, parts within their ranges, and the error is least."""

from __future__ import annotations

import numpy as np
import pytest

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
from synth.ranking import rank_forms
from synth.scaling import Scaled, scale
from synth.scaling.constraints import ceilings
from synth.scaling.crowding import crowded_blocks, rooms_at_both_inputs
from synth.scaling.objectives import current_shares, noise_power, response_error_power
from synth.scaling.signomial import Signomial
from synth.scaling.variables import Variables
from synth.transfer import Factor, TransferFunction
from tests.forms import exists
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
    predicted, _ = noise_power(variables, polarity, job.board.op_amp, fine)(v)
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
        predicted, _ = noise_power(variables, polarity, job.board.op_amp, fine)(v)
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


def test_a_signomial_far_out_is_large_and_finite() -> None:
    """Where the exponentials would overflow the value is still a number above all others."""
    f = Signomial(np.array([1.0, 1.0]), np.array([[1.0], [-1.0]]))
    value, gradient = f(np.array([1e4]))
    assert np.isfinite(value)
    assert value > 1e100
    assert gradient[0] > 0


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
        rank_forms(job_for(target, (1e-3, 1.0)), np.geomspace(1e-3, 1.0, 50), seed=1)
    said = str(caught.value)
    assert said.count("would need resistors of") == 1
    assert f"{', '.join(form for form in FORMS if exists(form, target))}: " in said
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


@pytest.mark.parametrize(("gains", "crowded"), [((0.2, 0.4), False), ((0.2, 4.0), True)])
def test_error_and_noise_of_a_cell_that_uses_both_inputs(
    gains: tuple[float, float], crowded: bool
) -> None:
    """y = k1 x1 + k2 in behind a lossy integrator, which inverts: against the whole circuit solved,
    with the noise gain of either input; the room left says which."""
    x = Block("x1", "integrator", (Term("in", 9e3), Term("x1", -4e3)))
    terms = (Term("x1", gains[0]), Term("in", gains[1]))
    graph = BlockGraph("test", (x, Block("y", "adder", terms, both_signs=True)), "y")
    polarity = choose_polarity(graph, inverted="no")
    assert [polarity.at_plus("y", t.source, 1.0) for t in terms] == [False, True]
    quiet = {"current_noise": 0.0}
    job = job_for(butterworth(1, 1e3), BAND, op_amp_figures=quiet)
    variables = Variables(graph)
    v = np.zeros(variables.count)
    v[[variables.size_place("x1"), variables.size_place("y")]] = np.log([4.7e-9, 14e3])
    place = variables.level_place("x1")
    assert place is not None
    v[place] = np.log(0.7)
    wanted = frozenset({"y"}) if crowded else frozenset()
    assert crowded_blocks(variables, polarity, v) == wanted
    rooms = [room(v)[0] for room in rooms_at_both_inputs(variables, polarity, 1e3)]
    assert (rooms[0] < 0) == crowded
    sizing = Sizing(capacitors={"x1": 4.7e-9}, feedback={"y": 14e3}, inverters=1e4)
    circuit = map_graph(graph.rescaled({"x1": 0.7}), polarity, sizing, job)
    program = compile_circuit(circuit)
    error = response_error(program.solve(FREQUENCY), graph.at(2j * np.pi * FREQUENCY))
    predicted, _ = response_error_power(
        variables, polarity, job.board.op_amp, FREQUENCY, crowded=wanted
    )(v)
    assert error.rms == pytest.approx(np.sqrt(predicted), rel=0.02)
    if not crowded:
        fine = np.geomspace(*BAND, 400)
        power, _ = noise_power(variables, polarity, job.board.op_amp, fine)(v)
        noise = program.noise(fine)
        assert power == pytest.approx(np.trapezoid(noise.total, fine), rel=5e-3)


def test_rooms_at_both_inputs_have_their_slopes() -> None:
    """Central differences agree with the gradients."""
    graph = realize(butterworth(2, 1e3, highpass=True), "khn")
    variables, polarity = Variables(graph), choose_polarity(graph)
    rng = np.random.default_rng(4)
    v = rng.normal(size=variables.count)
    for room in rooms_at_both_inputs(variables, polarity, 1e3):
        _, gradient = room(v)
        for k in range(variables.count):
            step = np.zeros(variables.count)
            step[k] = 1e-5
            slope = (room(v + step)[0] - room(v - step)[0]) / 2e-5
            assert gradient[k] == pytest.approx(slope, rel=1e-6, abs=1e-8)


@pytest.mark.parametrize("highpass", [False, True])
@pytest.mark.parametrize("order", [2, 4, 5])
def test_what_balances_two_inputs_is_of_a_usual_size(order: int, highpass: bool) -> None:
    """It stands at the non-inverting input, within the range of the resistors."""
    job = job_for(butterworth(order, 1e3, highpass=highpass), BAND)
    _, polarity, _, scaled = stages(job, "khn")
    circuit = map_graph(scaled.graph, polarity, scaled.sizing, job)
    legs = [(c, circuit.by_ref[c.balance]) for c in circuit.cells if c.balance]
    assert legs
    for cell, leg in legs:
        assert leg.nets == ("0", cell.plus)
        assert 1e3 * 0.999 <= leg.value <= 1e6
