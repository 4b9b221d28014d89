"""Boards that oscillate by themselves: predicted by their poles, shown by a step in ngspice."""

import numpy as np
import pytest

from netlist.jobfile import parse_job
from netlist.stimulus import decks_of
from synth.design import design

JOB = """
title = "PI and a resonance beyond the band"
[target]
expression = "(1+wi/s)*w0^2/(s^2+w0*s/q+w0^2)"
[target.parameters]
wi = "2*pi*300"
w0 = "2*pi*100e3"
q = 3
[signal]
band = ["10 Hz", "5 kHz"]
input_peak = "0.05 V"
[board]
form = "khn"
op_amp.gain_bandwidth = "{gain_bandwidth}"
[accept]
magnitude = "1 dB"
phase = "10 deg"
"""


@pytest.mark.parametrize(("gain_bandwidth", "oscillates"), [("1 MHz", True), ("100 MHz", False)])
def test_poles_right_of_the_axis_are_an_oscillation_in_ngspice(
    simulator, gain_bandwidth, oscillates
):
    """|H| over the band is within its limits either way: the pair is on the wrong side of the axis
    with slow op-amps, and grows until they saturate."""
    made = design(
        parse_job(JOB.replace("{gain_bandwidth}", gain_bandwidth)), boards=20, effort=0.05
    )
    assert made.nominal.largest_db < 0.1
    (check,) = (c for c in made.checks if c.name == "poles right of the axis")
    assert check.passed is not oscillates
    assert check.value == (2 if oscillates else 0)
    found = simulator.transient(decks_of(made).step, list(made.circuit.signal_nets()))
    late = found.time_s > 0.9 * found.time_s[-1]
    moved = max(np.ptp(v[late]) for v in found.voltages.values())
    assert bool(moved > made.job.board.swing_limit) is oscillates
    if oscillates:
        assert "oscillates at about" in check.note
