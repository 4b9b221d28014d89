"""Swing, slew, current and drift against closed forms in the values of the parts, and against
independent sweeps."""

from __future__ import annotations

import math

import numpy as np
import pytest

from netlist.ngspice import Simulator
from synth.candidates import sketch_form
from synth.circuit import Circuit
from synth.forms import FORMS
from synth.job import Job
from synth.limits import drifts, swing_checks, swings
from synth.nodal import compile_circuit
from synth.transfer import Factor, TransferFunction
from tests.forms import exists
from tests.jobs import job_for
from tests.strategies import butterworth

BAND = (20.0, 30e3)
W0 = 2 * math.pi * 1e3


def built(job: Job, form: str) -> Circuit:
    return sketch_form(job, form, np.geomspace(*job.signal.band_hz, 100)).circuit


@pytest.mark.parametrize("low", [20.0, 4e3])
def test_peak_slew_and_current_of_a_lossy_integrator(low: float) -> None:
    """v = -k V / (1 + j f/f0): the peak is at DC, the slew rate at the upper edge, and the
    output feeds R_f, C and the load, the first two into a virtual ground; a band above f0
    sees the current of C alone, nearly."""
    band = (low, BAND[1])
    target = TransferFunction.from_factors(-3 * W0, [], [Factor.real(-W0)])
    job = job_for(target, band, input_peak=2.0, load=5e3, op_amp_figures={"gain_bandwidth": 1e12})
    circuit = built(job, "observable")
    (cell,) = circuit.cells
    (out,) = swings(circuit, target, job)
    feedback = next(circuit.by_ref[r].value for r in cell.inputs if "out" in circuit.by_ref[r].nets)
    capacitor = circuit.by_ref[cell.feedback].value
    f = np.geomspace(*band, 20_001)
    volts = 6 / np.abs(1 + 1j * f / 1e3)
    assert out.peak == pytest.approx(6.0, rel=1e-4)
    assert out.peak_hz == 0
    assert out.slew == pytest.approx(np.max(2 * np.pi * f * volts), rel=1e-4)
    current = volts * np.abs(1 / feedback + 1 / 5e3 + 2j * np.pi * f * capacitor)
    assert out.current == pytest.approx(np.max(current), rel=1e-4)
    assert out.slew_limit == job.board.op_amp.slew_rate
    assert out.current_limit == job.board.op_amp.output_current
    peak, slew, amps = swing_checks((out,), {out.amplifier: "x1"})
    assert (peak.value, peak.unit, peak.limit) == (out.peak, "V", 10.5)
    assert (slew.value, slew.unit, slew.limit) == (pytest.approx(out.slew / 1e6), "V/us", 10.0)
    assert (amps.value, amps.unit, amps.limit) == (
        pytest.approx(1e3 * out.current),
        "mA",
        pytest.approx(20.0),
    )


@pytest.mark.parametrize("form", FORMS)
def test_peaks_and_rates_are_those_of_a_dense_sweep(form: str) -> None:
    """Every op-amp output, inverters and internal ones included, of a sharp band-pass."""
    pairs = [Factor.pair(W0, 30), Factor.pair(1.2 * W0, 5)]
    target = TransferFunction.from_factors(W0 * W0 / 60, [Factor.real(0)] * 2, pairs)
    if not exists(form, target):
        target = TransferFunction.from_factors(W0**4 / 30, [], pairs)
    job = job_for(target, BAND, input_peak=0.5)
    circuit = built(job, form)
    f = np.union1d(np.geomspace(0.1, 1e7, 20_001), 1e3 * np.linspace(0.7, 1.4, 40_001))
    nets = [a.output for a in circuit.amplifiers]
    volts = 0.5 * np.abs(compile_circuit(circuit).solve(f, nets=nets))
    inside = (f >= BAND[0]) & (f <= BAND[1])
    for k, swing in enumerate(swings(circuit, target, job)):
        assert swing.net == nets[k]
        assert swing.peak == pytest.approx(np.max(volts[:, k]), rel=2e-3)
        rate = np.max((2 * np.pi * f * volts[:, k])[inside])
        assert swing.slew == pytest.approx(rate, rel=2e-3)


def drifting(form: str, times: int, **figures: float) -> Circuit | None:
    """A pair behind one or two poles at the origin; None where the form does not exist."""
    zeros = [Factor.real(-0.2 * W0)] * times
    poles = [Factor.real(0)] * times + [Factor.pair(W0, 1.5)]
    target = TransferFunction.from_factors(W0**2, zeros, poles)
    if not exists(form, target):
        return None
    return built(job_for(target, BAND, input_peak=1e-2, op_amp_figures=figures), form)


def conductance_over_capacitance(circuit: Circuit, amplifier: str) -> float:
    """sum(1/R) / C of an integrator [1/s]."""
    cell = circuit.cell_of(amplifier)
    assert cell is not None
    conductance = sum(1 / circuit.by_ref[r].value for r in cell.inputs)
    return conductance / circuit.by_ref[cell.feedback].value


@pytest.mark.parametrize("form", FORMS)
def test_only_integrators_without_feedback_at_dc_drift(form: str) -> None:
    """One for every pole at the origin, whatever loops the others stand in, at no less than its
    own Vos sum(1/R)/C + Ib/C; a low-pass has none."""
    assert drifts(built(job_for(butterworth(3, 1e3), BAND), form)) == ()
    for times in (1, 2):
        circuit = drifting(form, times)
        if circuit is None:
            continue
        found = drifts(circuit)
        assert len(found) == times
        for drift in found:
            cell = circuit.cell_of(drift.amplifier)
            assert cell is not None
            own = 1e-3 * conductance_over_capacitance(circuit, drift.amplifier)
            own += 1e-7 / circuit.by_ref[cell.feedback].value
            assert drift.rate >= own * (1 - 1e-6)
        assert sum(len(d.behind) for d in found) <= times - 1


@pytest.mark.parametrize("form", FORMS)
def test_drift_is_what_the_largest_dc_offset_of_the_output_says(form: str) -> None:
    """With finite gain A0 a bare integrator stands where the current into its capacitor is
    output / A0 sum(1/R): the DC analysis of the whole circuit gives the rate a second time."""
    gain = 3e5
    circuit = drifting(form, 1, open_loop_gain=gain)
    if circuit is None:
        return
    (drift,) = drifts(circuit)
    offsets = compile_circuit(circuit).dc_offsets()
    worst = offsets.worst[offsets.nets.index(drift.net)]
    rate = worst / gain * conductance_over_capacitance(circuit, drift.amplifier)
    assert drift.rate == pytest.approx(rate, rel=1e-6)
    assert drift.behind == ()


def offset_deck(
    circuit: Circuit,
    ref: str,
    *,
    volts: float = 0.0,
    minus_amperes: float = 0.0,
    plus_amperes: float = 0.0,
) -> str:
    """The circuit at rest with one op-amp that has an offset or a bias current."""
    lines = ["* offsets", "Vin in 0 DC 0"]
    lines += [f"{p.ref} {p.nets[0]} {p.nets[1]} {p.value!r}" for p in circuit.passives]
    for a in circuit.amplifiers:
        on = float(a.ref == ref)
        lines.append(f"V{a.ref} p{a.ref} {a.plus} DC {on * volts!r}")
        lines.append(f"E{a.ref} {a.output} 0 p{a.ref} {a.minus} 1e7")
        lines.append(f"IM{a.ref} {a.minus} 0 DC {on * minus_amperes!r}")
        lines.append(f"IP{a.ref} {a.plus} 0 DC {on * plus_amperes!r}")
    return "\n".join([*lines, ".tran 1e-4 0.06 0 1e-4 uic", ".end", ""])


@pytest.mark.parametrize("form", ["cascade", "observable", "khn"])
def test_drift_is_the_sum_of_what_ngspice_finds_of_each_op_amp(form: str) -> None:
    """Each offset and each bias current alone, the slope after everything else has settled; each
    has its sign along all of its paths, and the worst signs add."""
    circuit = drifting(form, 1, open_loop_gain=1e7, bias_current=1e-6)
    assert circuit is not None
    (drift,) = drifts(circuit)
    slopes = []
    with Simulator() as simulator:
        for a in circuit.amplifiers:
            inputs = {"volts": 1e-3}, {"minus_amperes": 1e-6}, {"plus_amperes": 1e-6}
            for one in inputs:
                deck = offset_deck(circuit, a.ref, **one)
                found = simulator.transient(deck, [drift.net])
                at = np.interp([0.04, 0.06], found.time_s, found.voltages[drift.net])
                slopes.append(abs(float(at[1] - at[0])) / 0.02)
    assert drift.rate == pytest.approx(sum(slopes), rel=1e-3)
    own = 1e-3 * conductance_over_capacitance(circuit, drift.amplifier)
    assert drift.rate > 10 * own


def test_an_integrator_behind_another_has_no_rate_of_its_own() -> None:
    """1/s^2: the second follows the first; its rate is told for the first at 0 V."""
    target = TransferFunction.from_factors(1e6, [], [Factor.real(0)] * 2)
    circuit = built(job_for(target, BAND, input_peak=1e-2), "cascade")
    first, second = drifts(circuit)
    assert first.behind == ()
    assert second.behind == (first.amplifier,)
    for drift in (first, second):
        cell = circuit.cell_of(drift.amplifier)
        assert cell is not None
        capacitor = circuit.by_ref[cell.feedback].value
        own = 1e-3 * conductance_over_capacitance(circuit, drift.amplifier) + 1e-7 / capacitor
        if len(circuit.amplifiers) == 2:
            assert drift.rate == pytest.approx(own, rel=1e-6)


def test_an_inverter_in_front_loads_the_source_too() -> None:
    """With a source resistance the inverter of the input draws current like every resistor
    on the source's net; the response stays H(s)."""
    ideal = {"gain_bandwidth": 1e13, "open_loop_gain": 1e12, "slew_rate": 1e12}
    biproper = TransferFunction.from_factors(1, [Factor.real(-W0)], [Factor.real(-5 * W0)])
    turned = TransferFunction.from_factors(W0, [Factor.real(W0)], [Factor.pair(W0, 1)])
    f = np.geomspace(*BAND, 30)
    seen = set()
    for form in FORMS:
        some = (biproper, turned, turned.negated())
        for target in (t for t in some if exists(form, t)):
            job = job_for(
                target, BAND, source_resistance=700.0, op_amp_figures=ideal, input_peak=1e-3
            )
            circuit = built(job, form)
            seen |= {c.block for c in circuit.cells if c.kind == "inverter"}
            response = compile_circuit(circuit).solve(f)
            np.testing.assert_allclose(response, target.response(f), rtol=1e-6)
    assert "in" in seen


def test_current_into_a_cell_that_uses_both_inputs_ends_at_no_virtual_ground() -> None:
    """The summer of a state-variable low-pass feeds its own feedback resistor, whose far end lies
    at the divider of the other input, and the first integrator."""
    target = butterworth(2, 1e3)
    ideal = {"gain_bandwidth": 1e12, "open_loop_gain": 1e9}
    job = job_for(target, BAND, input_peak=2.0, op_amp_figures=ideal)
    circuit = built(job, "khn")
    summer, first, _ = circuit.cells
    assert summer.kind == "difference"
    f = np.geomspace(*BAND, 20_001)
    nets = [summer.output, first.output]
    v = dict(zip(nets, 2.0 * compile_circuit(circuit).solve(f, nets=nets).T, strict=True))
    v["in"], v["0"] = np.full(f.size, 2.0 + 0j), np.zeros(f.size, dtype=complex)
    v["out"] = 2.0 * compile_circuit(circuit).solve(f)
    hanging = [p for p in circuit.passives if summer.plus in p.nets]
    at_plus = sum(v[p.nets[0]] / p.value for p in hanging) / sum(1 / p.value for p in hanging)
    own = (v[summer.output] - at_plus) / circuit.by_ref[summer.feedback].value
    onward = v[summer.output] / circuit.by_ref[first.inputs[0]].value
    found = next(s for s in swings(circuit, target, job) if s.amplifier == summer.amplifier)
    assert found.current == pytest.approx(np.max(np.abs(own + onward)), rel=1e-4)
