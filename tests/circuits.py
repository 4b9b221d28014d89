"""Small circuits made by hand, shared by the tests.

Values are arguments, so that a published example and a random board come from one place.
"""

from __future__ import annotations

from dataclasses import replace

from synth.circuit import Amplifier, Circuit, Passive
from synth.op_amps import op_amp_class
from synth.parts import OpAmp, PartRule

RESISTORS = PartRule(kind="resistor", series="E96", tolerance=0.01, smallest=1e3, largest=1e6)
CAPACITORS = PartRule(kind="capacitor", series="E12", tolerance=0.05, smallest=1e-10, largest=1e-6)


def figures(**changes) -> OpAmp:
    """The general-purpose op-amp with some figures changed."""
    return replace(op_amp_class("general purpose"), **changes)


def near_ideal() -> OpAmp:
    """An op-amp so fast and of so much gain that it hardly shows."""
    return figures(gain_bandwidth=1e13, open_loop_gain=1e9, voltage_noise=0.0, current_noise=0.0)


def part(ref: str, nets: str, value: float, sets: str = "") -> Passive:
    """A resistor or a capacitor, by the first letter of its reference."""
    first, second = nets.split()
    kind, rule = ("resistor", RESISTORS) if ref[0] == "R" else ("capacitor", CAPACITORS)
    return Passive(
        ref=ref, kind=kind, nets=(first, second), value=value, ideal=value, rule=rule, sets=sets
    )


def amplifier(ref: str, nets: str, op_amp: OpAmp) -> Amplifier:
    """An op-amp between nets "plus minus output"."""
    plus, minus, output = nets.split()
    return Amplifier(ref=ref, plus=plus, minus=minus, output=output, figures=op_amp)


def rc(R: float = 10e3, C: float = 10e-9) -> Circuit:
    """A resistor and a capacitor: 1/(1 + s R C)."""
    return Circuit(passives=(part("R1", "in out", R), part("C1", "out 0", C)), amplifiers=())


def integrator(op_amp: OpAmp, R: float = 10e3, C: float = 10e-9) -> Circuit:
    """The inverting integrator: -1/(s R C) with an ideal op-amp."""
    return Circuit(
        passives=(part("R1", "in out_s", R), part("C1", "out_s out", C)),
        amplifiers=(amplifier("U1", "0 out_s out", op_amp),),
    )


def leaky_integrator(op_amp: OpAmp, R: float = 10e3, Rf: float = 10e3, C: float = 1e-9) -> Circuit:
    """The inverting integrator with a leak: -(Rf/R)/(1 + s Rf C) with an ideal op-amp."""
    return Circuit(
        passives=(
            part("R1", "in out_s", R),
            part("R2", "out_s out", Rf),
            part("C1", "out_s out", C),
        ),
        amplifiers=(amplifier("U1", "0 out_s out", op_amp),),
    )


def amplifier_of_gain(op_amp: OpAmp, R: float = 10e3, Rf: float = 10e3) -> Circuit:
    """The inverting amplifier: -Rf/R with an ideal op-amp."""
    return Circuit(
        passives=(part("R1", "in out_s", R), part("R2", "out_s out", Rf)),
        amplifiers=(amplifier("U1", "0 out_s out", op_amp),),
    )


def follower(op_amp: OpAmp, load: float = 10e3) -> Circuit:
    """The voltage follower: 1 with an ideal op-amp."""
    return Circuit(
        passives=(part("RL", "out 0", load), part("R1", "in 0", load)),
        amplifiers=(amplifier("U1", "in out out", op_amp),),
    )


def tow_thomas(
    op_amp: OpAmp, *, R: float = 10e3, C: float = 1.59e-9, damping: float = 10e3
) -> Circuit:
    """Two integrators and an inverter in a loop (Tow 1968, Thomas 1971): low-pass at ``out``."""
    return Circuit(
        passives=(
            part("R1", "in x1_s", R),
            part("R2", "x1 x1_s", damping),
            part("R3", "out_n x1_s", R),
            part("C1", "x1_s x1", C),
            part("R4", "x1 out_s", R),
            part("C2", "out_s out", C),
            part("R5", "out out_ns", R),
            part("R6", "out_ns out_n", R),
        ),
        amplifiers=(
            amplifier("U1", "0 x1_s x1", op_amp),
            amplifier("U2", "0 out_s out", op_amp),
            amplifier("U3", "0 out_ns out_n", op_amp),
        ),
    )


def state_variable(op_amp: OpAmp) -> Circuit:
    """The state-variable filter of the ITC'97 mixed-signal benchmark set (values from memory):
    R = 10 k, C = 20 n, divider 3 k / 7 k; low-pass at ``out``, its band-pass at ``bp``."""
    return Circuit(
        passives=(
            part("R1", "in hp_s", 10e3),
            part("R2", "out hp_s", 10e3),
            part("R3", "hp_s hp", 10e3),
            part("R4", "hp bp_s", 10e3),
            part("C1", "bp_s bp", 20e-9),
            part("R5", "bp out_s", 10e3),
            part("C2", "out_s out", 20e-9),
            part("R6", "mid 0", 3e3),
            part("R7", "bp mid", 7e3),
        ),
        amplifiers=(
            amplifier("U1", "mid hp_s hp", op_amp),
            amplifier("U2", "0 bp_s bp", op_amp),
            amplifier("U3", "0 out_s out", op_amp),
        ),
    )


def multiple_feedback(op_amp: OpAmp) -> Circuit:
    """A multiple-feedback low-pass: R1 = R2 = 3k3, R3 = 2k2, C1 = 100 n, C2 = 22 n."""
    return Circuit(
        passives=(
            part("R1", "in mid", 3300.0),
            part("R2", "out mid", 3300.0),
            part("R3", "mid out_s", 2200.0),
            part("C1", "mid 0", 100e-9),
            part("C2", "out_s out", 22e-9),
        ),
        amplifiers=(amplifier("U1", "0 out_s out", op_amp),),
    )
