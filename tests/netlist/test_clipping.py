"""Predicted peaks and DC levels against op-amps that saturate, in ngspice."""

import re
from dataclasses import replace

import numpy as np
import pytest

from netlist.clipping import sine_check, sine_run
from netlist.deck import number, sine_deck
from netlist.ngspice import TransientResult
from netlist.stimulus import decks_of
from synth.candidates import sketch_form
from synth.headroom import tightest_limit
from synth.limits import swings
from synth.nodal import compile_circuit
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for
from tests.netlist import boards


@pytest.fixture(scope="module")
def design():
    """The board of the tests with its real swings."""
    made = boards.design()
    return replace(made, swings=swings(made.circuit, made.wanted, made.job))


def run(simulator, made, times):
    """The check with the input at `times` what makes the hottest output reach its limit."""
    hottest = max(made.swings, key=lambda s: s.peak / s.peak_limit)
    margin = hottest.peak_limit / hottest.peak
    told = sine_run(made, input_peak=times * margin * made.job.signal.input_peak)
    found = simulator.transient(told.deck, list(told.expected))
    return sine_check(told, found), told, found


@pytest.mark.parametrize(
    ("times", "clips"), [(0.5, False), (0.99, False), (1.05, True), (1.5, True)]
)
def test_outputs_clip_past_the_printed_margin_and_not_before(design, simulator, times, clips):
    """At 1.05 times the margin the hottest output loses about 1/21 of its size, and so does the
    inverter behind it."""
    check, told, found = run(simulator, design, times)
    assert check.passed is not clips
    limit = design.job.board.swing_limit
    size = np.ptp(found.voltages[told.net]) / 2
    assert size == pytest.approx(min(times, 1.0) * limit, rel=3e-3)
    if clips:
        assert check.value == pytest.approx(100 * (1 - 1 / times), abs=1.0)
        assert check.note.startswith(("at out, ", "at x2_n, "))
    else:
        assert check.value < 0.1


def test_a_peak_at_dc_is_shown_by_a_slow_sine(design, simulator):
    """The hottest output of a well damped low-pass has its peak at DC."""
    slow = replace(design, swings=tuple(replace(s, peak_hz=0.0) for s in design.swings))
    told = sine_run(slow)
    assert told.frequency_hz == pytest.approx(1000 / 30, rel=1e-6)
    check = sine_check(told, simulator.transient(told.deck, list(told.expected)))
    assert check.passed


def test_no_run_where_peaks_are_predicted_to_clip_or_a_sine_never_settles(design):
    hot = tuple(replace(s, peak=2 * s.peak_limit) for s in design.swings)
    assert sine_run(replace(design, swings=hot)) is None
    for damping in (1.5e6, 1e9):  # Q of 100, and op-amps that turn what is left of it negative
        ringing = design.circuit.with_values({"R2": damping})
        assert sine_run(replace(design, circuit=ringing)) is None
    growing = TransferFunction.from_factors(1, (), [Factor.real(1.0), Factor.real(-1e6)])
    assert sine_run(replace(design, wanted=growing)) is None
    assert sine_run(replace(design, swings=())) is None


def test_a_sine_stays_in_the_band_where_op_amps_would_slew(design):
    """A peak far up, where slewing and not the rail would limit it."""
    far = tuple(replace(s, peak_hz=1e9, slew_limit=1.0) for s in design.swings)
    low, high = design.job.signal.band_hz
    assert low <= sine_run(replace(design, swings=far)).frequency_hz <= high


def test_the_output_that_falls_short_most_is_named(design):
    told = sine_run(design)
    time = np.linspace(0, 1, 401)
    wave = np.sin(2 * np.pi * 2 * time)
    voltages = {net: size * wave for net, size in told.expected.items()}
    voltages["x1"] = 0.9 * voltages["x1"]
    check = sine_check(told, TransientResult(time, voltages))
    assert check.value == pytest.approx(10, rel=1e-6)
    assert "at x1, " in check.note


def test_the_tightest_limit_is_the_smallest_ratio(design):
    """Against the swings themselves; each in turn made the tightest."""
    found = tightest_limit(design)
    ratios = [s.peak_limit / s.peak for s in design.swings]
    assert found.quantity == "swing"
    assert found.ratio == pytest.approx(min(ratios))
    for change, quantity in (
        ({"slew_limit": 1e-3}, "slew rate"),
        ({"current_limit": 1e-9}, "output current"),
    ):
        tight = (*design.swings[:-1], replace(design.swings[-1], **change))
        found = tightest_limit(replace(design, swings=tight))
        assert (found.quantity, found.amplifier) == (quantity, design.swings[-1].amplifier)
        assert found.ratio < 1


def test_gain_bandwidth_bites_first_where_little_else_is_asked(design):
    """With swings that need nothing, only the gain-bandwidth is left."""
    idle = tuple(replace(s, peak=0.0, slew=0.0, current=0.0) for s in design.swings)
    found = tightest_limit(replace(design, swings=idle))
    assert (found.quantity, found.amplifier) == ("gain-bandwidth", "")


def with_offsets(deck, circuit, offset, plus, minus):
    """The deck with a voltage in series with each + input and currents into both inputs."""
    for k, amplifier in enumerate(circuit.amplifiers):
        name = amplifier.ref.lower()
        old = f"X{amplifier.ref} {amplifier.plus} "
        assert old in deck
        added = (
            f"Voffset_of_{name} {name}_p {amplifier.plus} DC {offset[k]!r}\n"
            f"Iplus_of_{name} {name}_p 0 DC {plus[k]!r}\n"
            f"Iminus_of_{name} {amplifier.minus} 0 DC {minus[k]!r}\n"
        )
        deck = deck.replace(old, f"{added}X{amplifier.ref} {name}_p ")
    return deck


@pytest.mark.parametrize("output", [0, 1, 2])
def test_offset_and_bias_move_outputs_as_predicted(design, simulator, output):
    """Signs that add up at one output reach its predicted worst case; every other output stands
    where the gains say.  All + inputs are at ground, where a current moves nothing."""
    circuit = design.circuit
    found = compile_circuit(circuit).dc_offsets()
    offset = found.offset * np.sign(found.voltage_gain[output])
    plus = found.bias_current * np.sign(found.plus_gain[output])
    minus = found.bias_current * np.sign(found.minus_gain[output])
    deck = with_offsets(
        decks_of(design).board, circuit, offset.tolist(), plus.tolist(), minus.tolist()
    )
    point = simulator.operating_point(deck, list(found.nets))
    levels = np.array([point[net] for net in found.nets])
    expected = found.voltage_gain @ offset + found.plus_gain @ plus + found.minus_gain @ minus
    np.testing.assert_allclose(levels, expected, rtol=1e-5, atol=1e-9)
    assert abs(levels[output]) == pytest.approx(found.worst[output], rel=1e-5)
    assert found.worst[output] > 1e-3


def test_a_square_wave_all_but_reaches_the_bound_for_any_input(simulator):
    """Op-amps raise the Q of a resonance, and what bounds every waveform must know them: with ideal
    ones in their place the bound would lie 12 % lower at the output."""
    pair = Factor.pair(2 * np.pi * 3e3, 5.0)
    target = TransferFunction.from_factors(2 * pair.natural_frequency**2, [], [pair])
    slow = {"gain_bandwidth": 5e5}
    job = job_for(
        target, (30.0, 9e3), op_amp_figures=slow, input_peak=0.3, swing="any", form="tow_thomas"
    )
    frequency = np.geomspace(30.0, 9e3, 200)
    circuit = sketch_form(job, "tow_thomas", frequency).circuit
    circuit = circuit.with_values({p.ref: p.ideal for p in circuit.passives})
    found = {s.net: s for s in swings(circuit, target, job)}
    sine = {s.net: s for s in swings(circuit, target, as_sine(job))}
    hot = max(sine.values(), key=lambda s: s.peak)
    deck = sine_deck(
        circuit,
        title="square wave",
        supply=job.board.supply,
        peak_volts=0.3,
        frequency_hz=hot.peak_hz,
        rise_s=1e-6,
        stop_s=30 / hot.peak_hz,
        kept_s=29 / hot.peak_hz,
        largest_step_s=5e-3 / hot.peak_hz,
    )
    turn = f"sin({number(2 * np.pi * hot.peak_hz)}*time)"
    square, count = re.subn(r"(?m)^Bsine (\S+) 0 v=.*$", rf"Bsine \1 0 v=0.3*sgn({turn})", deck)
    assert count == 1
    volts = simulator.transient(square, list(found)).voltages
    for net, swing in found.items():
        assert np.max(np.abs(volts[net])) <= 1.002 * swing.peak
    assert np.max(np.abs(volts[hot.net])) > 0.95 * found[hot.net].peak


def as_sine(job):
    """The same job judged by sines."""
    return replace(job, signal=replace(job.signal, swing="sine"))
