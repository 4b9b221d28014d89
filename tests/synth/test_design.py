"""The whole pipeline on small jobs: every promise of the result, and what it refuses."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.choosing.model import Ceilings
from synth.design import compare_forms, design
from synth.errors import JobError, RealizationError
from synth.evidence import response_error
from synth.job import Accept, Loop
from synth.limits import swings
from synth.nodal import compile_circuit
from synth.quantities import show
from synth.readback import block_names, graph_of
from synth.transfer import Factor, TransferFunction
from synth.values import ValueSearch, level_limits
from tests.jobs import capacitor_rule, job_for
from tests.strategies import butterworth

BAND = (100.0, 2e3)
PI = TransferFunction.from_factors(2, [Factor.real(-600)], [Factor.real(0)])


def test_a_design_holds_together() -> None:
    """Nominal error from the values, yield within its interval, swing below the rails, the
    block diagram's weights those of the parts."""
    job = job_for(butterworth(3, 1e3), BAND, input_peak=3.0)
    found = design(job, boards=200, effort=0.1)
    response = job.target.response(found.frequency_hz)
    error = response_error(compile_circuit(found.circuit).solve(found.frequency_hz), response)
    assert error.rms == pytest.approx(found.nominal.rms, rel=1e-9)
    assert found.nominal.rms < found.nearest.rms
    assert found.tolerance.low <= found.tolerance.share <= found.tolerance.high
    assert all(c.passed for c in found.checks)
    assert [c.form for c in found.candidates] == ["controllable"]
    names = block_names(found.circuit)
    built = graph_of(found.circuit)
    # A form with more weights than H(s) and the levels decide leaves some to the choice of values.
    terms = sum(len(b.terms) for b in found.graph.blocks)
    decided = len(found.graph.blocks) - 1 + job.target.order + 1
    rtol = 0.05 if terms == decided else 0.15
    for cell in found.circuit.cells:
        if cell.kind == "inverter":
            continue
        weights = sorted(abs(float(t.weight)) for t in found.graph.by_name[cell.block].terms)
        direct = list(built.by_name[names[cell.output]].terms)
        inverters = {names[c.output] for c in found.circuit.cells if c.kind == "inverter"}
        if any(t.source in inverters for t in direct):
            continue
        np.testing.assert_allclose(sorted(abs(float(t.weight)) for t in direct), weights, rtol=rtol)


def test_same_seed_same_design_and_another_seed_other_boards() -> None:
    """The seed decides the choice of values and the boards."""
    job = job_for(butterworth(2, 1e3), BAND)
    first, again, other = (design(job, boards=150, effort=0.1, seed=s) for s in (1, 1, 2))
    assert first.circuit == again.circuit
    assert first.tolerance.error_95_db == again.tolerance.error_95_db
    assert first.tolerance.error_95_db != other.tolerance.error_95_db


def test_an_output_that_must_clip_fails_its_swing_check() -> None:
    """H alone sets the output: 20 V peak on 12 V rails fails, and nothing else does."""
    job = job_for(butterworth(2, 1e3), BAND, input_peak=20.0)
    failed = [c for c in design(job, boards=50, effort=0.1).checks if not c.passed]
    assert failed
    assert all(c.name.startswith(("peak of", "inverter")) for c in failed)
    assert failed[0].value == pytest.approx(20.0, rel=0.05)


def test_every_output_is_watched_where_its_op_amp_shows_the_peak() -> None:
    """The adder behind a lead or a notch passes all high frequencies: its peak is flat up to
    where no op-amp has any gain left, and is watched where the flat part begins."""
    target = TransferFunction.from_factors(
        2.3e7,
        [Factor.pair(290, 4), Factor.real(-113)],
        [Factor.pair(290, Fraction(7, 10)), Factor.real(-880), Factor.pair(3270, Fraction(3, 4))],
    )
    job = job_for(target, (1.0, 200.0), op_amp="JFET input")
    sketch = sketch_form(job, "cascade", np.geomspace(1.0, 200.0, 100))
    program = compile_circuit(sketch.circuit)
    peaks = {s.net: s.peak for s in swings(sketch.circuit, job.target, job)}
    watched = level_limits(sketch, job)
    assert {"y1", "y1_n"} < set(watched)
    for net, level in watched.items():
        shown = job.signal.input_peak * abs(program.solve([level.peak_hz], nets=[net])[0, 0])
        assert shown == pytest.approx(peaks[net], rel=0.02)


@pytest.mark.parametrize("seed", [2, 3, 4])
def test_an_input_above_the_rails_is_inverted_below_them(seed: int) -> None:
    """The inverter of the input keeps below its rail whatever values the seed leads to."""
    target = TransferFunction.from_factors(2000, [], [Factor.real(-6000)])
    found = design(job_for(target, BAND, input_peak=20.0), boards=10, effort=0.1, seed=seed)
    assert [s.net for s in found.swings] == ["in_n", "out"]
    assert all(s.peak <= s.peak_limit for s in found.swings)


def test_levels_end_at_the_rails_whatever_slow_op_amps_make_of_ideal_values() -> None:
    """At Q = 5 and 3 kHz op-amps of 500 kHz raise the peaks of ideal values by an eighth; values
    that make up for that take it away again, and an inverter whose gain is free keeps below its
    rail all the same."""
    w = 2 * math.pi * 3e3
    target = TransferFunction.from_factors(2 * w * w, [], [Factor.pair(w, 5)])
    slow = {"gain_bandwidth": 500e3}
    job = job_for(target, (30.0, 9e3), form="tow_thomas", input_peak=0.5, op_amp_figures=slow)
    frequency = np.geomspace(30.0, 9e3, 200)
    sketch = sketch_form(job, "tow_thomas", frequency)
    search = ValueSearch(sketch, job, target.response(frequency), frequency, 1, 10_000_000)
    task = search.task(sketch.circuit)
    assert task.ceilings is not None
    volts = job.signal.input_peak * task.ceilings.highest
    assert np.all(volts <= job.board.swing_limit)
    assert np.all(volts > 0.95 * job.board.swing_limit)
    found = swings(task.choose().circuit, target, job)
    assert all(s.peak <= s.peak_limit for s in found)


@pytest.mark.parametrize("target", [PI, butterworth(4, 1e3)])
def test_with_ideal_op_amps_levels_are_what_the_values_make_them(target) -> None:
    """Where H(s) says how large an output is, and where the ideal values do: the same ceilings,
    those of integrators that are larger below the band too."""
    ideal = {"gain_bandwidth": 1e13, "open_loop_gain": 1e12, "slew_rate": 1e12}
    job = job_for(target, BAND, form="cascade", input_peak=0.1, op_amp_figures=ideal)
    sketch = sketch_form(job, "cascade", np.geomspace(*BAND, 100))
    program, values = compile_circuit(sketch.circuit), [p.ideal for p in sketch.circuit.passives]
    levels = level_limits(sketch, job)
    assert any(level.gain for level in levels.values())
    plain = {net: replace(level, gain=None) for net, level in levels.items()}
    one, other = (Ceilings.of(program, np.array(values), each) for each in (levels, plain))
    assert one is not None
    assert other is not None
    np.testing.assert_allclose(one.highest, other.highest, rtol=1e-6)
    np.testing.assert_allclose(one.lowest, other.lowest, rtol=1e-6)


def test_pole_at_the_origin_is_allowed_flagged_and_measured_from_the_band() -> None:
    """The integrator drifts at Vos/(R C) + Ib/C, and peaks are those from the band's edge up."""
    job = job_for(PI, (10.0, 5e3), input_peak=0.1)
    found = design(job, boards=50, effort=0.1)
    (drift,) = found.drifts
    cell = next(c for c in found.circuit.cells if c.kind == "integrator")
    capacitor = found.circuit.by_ref[cell.feedback].value
    resistor = found.circuit.by_ref[cell.inputs[0]].value
    assert drift.rate == pytest.approx(1e-3 / (resistor * capacitor) + 100e-9 / capacitor)
    output = next(s for s in found.swings if s.net == "out")
    expected = 0.1 * abs(PI.response(np.array([10.0]))[0])
    assert output.peak == pytest.approx(expected, rel=0.01)
    assert any("pole at s = 0" in n for n in found.notices)


def test_any_input_uses_the_l1_bound() -> None:
    """With swing = "any" the output's peak is the L1 norm of H times the input."""
    q = 2.0
    w0 = 2 * math.pi * 1e3
    target = TransferFunction.from_factors(w0**2, [], [Factor.pair(w0, q)])
    found = design(job_for(target, BAND, swing="any", input_peak=1.0), boards=50, effort=0.1)
    zeta = 1 / (2 * q)
    l1 = 1 / math.tanh(math.pi * zeta / (2 * math.sqrt(1 - zeta**2)))
    output = next(s for s in found.swings if s.net == "out")
    assert output.peak == pytest.approx(l1, rel=0.02)
    assert output.peak_hz is None
    assert all(s.peak <= s.peak_limit for s in found.swings)


def test_any_input_with_a_pole_at_the_origin_is_refused() -> None:
    """No bound exists; the message says what to use."""
    with pytest.raises(RealizationError, match=r"signal.swing: got 'any'.*expected 'sine'"):
        design(job_for(PI, (10.0, 5e3), swing="any"), boards=10, effort=0.1)


def test_either_polarity_gives_the_negative_where_it_saves_an_op_amp() -> None:
    """The wanted response is -H, the error is measured against it."""
    job = job_for(butterworth(1, 1e3), BAND, inverted="either")
    found = design(job, boards=50, effort=0.1)
    assert found.inverted
    assert len(found.circuit.amplifiers) == 1
    assert found.nominal.largest_deg < 1.0
    np.testing.assert_allclose(
        found.wanted.response(found.frequency_hz), -job.target.response(found.frequency_hz)
    )


def test_auto_takes_the_best_of_the_forms_that_most_boards_pass() -> None:
    """Among those whose yield may be that of the best one: fewest op-amps, then smallest error."""
    job = job_for(butterworth(6, 1e3), BAND)
    chosen, candidates = compare_forms(job)
    spread = {c.form: max(c.spread_db / 0.5, c.spread_deg / 3.0) for c in candidates if c.possible}
    figures = {c.form: c.figures for c in candidates if c.figures is not None}
    op_amps = {c.form: c.op_amps for c in candidates}
    most = max(figures.values(), key=lambda f: f.passed)
    rivals = [form for form, f in figures.items() if f.high >= most.low]
    assert chosen == min(rivals, key=lambda r: (op_amps[r], figures[r].error_95_db))
    assert spread[chosen] <= spread["cascade"] < spread["controllable"]


def test_yield_limit_is_a_check() -> None:
    """5 % capacitors cannot hold 0.1 dB."""
    job = job_for(
        butterworth(3, 1e3),
        BAND,
        capacitors=capacitor_rule(tolerance=0.05),
        accept=Accept(magnitude_db=0.1, phase_deg=1.0, yield_share=0.9),
    )
    check = next(c for c in design(job, boards=100, effort=0.1).checks if c.name == "yield")
    assert not check.passed
    assert check.limit == pytest.approx(90)


def test_loop_margins_are_checked_against_their_limits() -> None:
    """The nominal board's margins stand beside those of H(s)."""
    plant = TransferFunction.from_polynomials([3e5], [1, 2e3, 0])
    job = job_for(PI, (10.0, 5e3), input_peak=0.1)
    job = replace(job, loop=Loop(plant=plant, phase_margin_deg=89.0))
    found = design(job, boards=50, effort=0.1)
    assert found.loop.nominal.phase_margin_deg == pytest.approx(
        found.loop.target.phase_margin_deg, abs=1.0
    )
    failed = {c.name for c in found.checks if not c.passed}
    assert failed == {"phase margin"}


def test_unknown_form_is_refused() -> None:
    """With the names there are."""
    with pytest.raises(JobError, match="expected auto, controllable, observable, cascade"):
        design(job_for(butterworth(2, 1e3), BAND, form="spiral"), boards=10, effort=0.1)


def test_progress_is_told_stage_by_stage() -> None:
    """Stages in order, done never above total."""
    told: list[tuple[str, int, int]] = []
    design(
        job_for(butterworth(1, 1e3), BAND, form="auto"),
        boards=250,
        progress=lambda stage, done, total: told.append((stage, done, total)),
    )
    stages = list(dict.fromkeys(stage for stage, _, _ in told))
    assert stages == ["forms", "values", "boards", "worst case", "limits"]
    assert all(0 <= done <= total for _, done, total in told)


def test_the_loop_of_an_inverting_board_is_that_of_h() -> None:
    """A board of -H stands in a loop that inverts once more: its margins are those of H(s)."""
    plant = TransferFunction.from_polynomials([3e5], [1, 2e3, 0])
    job = job_for(PI, (10.0, 5e3), input_peak=0.1, inverted="yes")
    found = design(replace(job, loop=Loop(plant=plant)), boards=10, effort=0.1)
    assert found.inverted
    assert found.loop.target.unstable_poles == 0
    assert found.loop.nominal.unstable_poles == 0
    assert found.loop.nominal.phase_margin_deg == pytest.approx(
        found.loop.target.phase_margin_deg, abs=1.0
    )


def test_the_loop_is_run_over_the_boards_of_the_tolerance_run() -> None:
    """Half of them lie on either side of the median, which is near the nominal board; too few
    good ones draw a notice."""
    plant = TransferFunction.from_polynomials([3e5], [1, 2e3, 0])
    job = replace(job_for(PI, (10.0, 5e3), input_peak=0.1), loop=Loop(plant=plant))
    found = design(job, boards=60, effort=0.1)
    run = found.loop.boards
    assert run.stable == run.passed == run.boards == 60
    assert run.phase_margin_deg.p50 == pytest.approx(found.loop.nominal.phase_margin_deg, abs=1.0)
    assert run.crossover_hz.p5 < found.loop.nominal.crossover_hz < run.crossover_hz.p95
    check = next(c for c in found.checks if c.name == "yield of the loop")
    assert (check.value, check.limit, check.passed) == (100.0, None, True)
    strict = Loop(plant=plant, phase_margin_deg=run.phase_margin_deg.p50)
    found = design(replace(job, loop=strict), boards=60, effort=0.1)
    (said,) = [n for n in found.notices if "boards keep the loop" in n]
    short = 60 - found.loop.boards.passed
    assert said.endswith(
        f"none is unstable, {short} are stable but miss the phase margin of "
        f"{show(strict.phase_margin_deg, 'deg')}"
    )


def test_the_loop_is_run_over_every_board() -> None:
    """However many there are, and it says how far it has come."""
    plant = TransferFunction.from_polynomials([3e5], [1, 2e3, 0])
    job = replace(job_for(PI, (10.0, 5e3), input_peak=0.1), loop=Loop(plant=plant))
    stages = []
    found = design(job, boards=1200, effort=0.1, progress=lambda *stage: stages.append(stage))
    assert found.tolerance.boards == found.loop.boards.boards == 1200
    assert [stage for stage in stages if stage[0] == "loops"] == [
        ("loops", 1000, 1200),
        ("loops", 1200, 1200),
    ]


@pytest.mark.parametrize("call", [design, compare_forms])
def test_a_plant_that_h_itself_cannot_hold_is_refused(call) -> None:
    """0.5 / (s - 1) needs twice the gain that H has: the job contradicts itself."""
    plant = TransferFunction.from_polynomials([0.5], [1, -1])
    job = replace(job_for(butterworth(1, 1e3), BAND), loop=Loop(plant=plant))
    with pytest.raises(JobError, match=r"^loop: got a plant .* with 1 pole in the right"):
        call(job)
