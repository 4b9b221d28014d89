"""A small board made by hand: a two-integrator low-pass of 1 kHz (Tow 1968, Thomas 1971), with
everything a finished design holds, and a verification of it as a simulator would give it."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from netlist.drawings import Drawings
from netlist.ngspice import TransientResult
from netlist.verification import Verification
from synth.allowance import op_amp_allowance
from synth.choosing.bottlenecks import Bottleneck
from synth.choosing.certificate import Certificate
from synth.circuit import Amplifier, Cell, Circuit, Passive
from synth.evidence import Check, response_error
from synth.graph import Block, BlockGraph, Term
from synth.job import Accept, Board, Job, Signal
from synth.nodal import compile_circuit
from synth.op_amps import op_amp_class
from synth.parts import PartRule
from synth.results import (
    Candidate,
    Design,
    Drift,
    ErrorFigures,
    FormFigures,
    NoiseResult,
    Swing,
    ToleranceResult,
)
from synth.tolerance import error_budget
from synth.transfer import Factor, TransferFunction

RESISTORS = PartRule(kind="resistor", series="E96", tolerance=0.01, smallest=1e3, largest=1e6)
CAPACITORS = PartRule(kind="capacitor", series="E12", tolerance=0.05, smallest=1e-10, largest=1e-6)
W0, Q = 2 * math.pi * 1000.0, 0.9
BAND = (10.0, 10e3)
LIMITS = (Check("peak at U1", 10.5, 2.1, "V", True), Check("yield", None, 88.0, "%", True))


def circuit() -> Circuit:
    """The circuit: integrators x1 and out, an inverter that closes the loop."""
    ideal = 1 / (W0 * 10e-9)

    def part(kind: str, ref: str, nets: str, *values_and_use) -> Passive:
        first, second = nets.split()
        ideal, value, sets = values_and_use
        rule = RESISTORS if kind == "resistor" else CAPACITORS
        return Passive(
            ref=ref,
            kind=kind,
            nets=(first, second),
            value=value,
            ideal=ideal,
            rule=rule,
            sets=sets,
        )

    parts = (
        part("resistor", "R1", "in x1_s", ideal, 15.8e3, "input gain of x1"),
        part("resistor", "R2", "x1 x1_s", Q * ideal, 14.3e3, "damping of x1"),
        part("resistor", "R3", "x2_n x1_s", ideal, 15.8e3, "feedback from x2 into x1"),
        part("capacitor", "C1", "x1_s x1", 10e-9, 10e-9, "time constant of x1"),
        part("resistor", "R4", "x1 x2_s", ideal, 16.2e3, "coupling from x1 into x2"),
        part("capacitor", "C2", "x2_s out", 10e-9, 10e-9, "time constant of x2"),
        part("resistor", "R5", "out x2_ns", 10e3, 10e3, "inverter of x2, input"),
        part("resistor", "R6", "x2_ns x2_n", 10e3, 10e3, "inverter of x2, feedback"),
    )
    figures = op_amp_class("general purpose")
    amplifiers = tuple(
        Amplifier(ref=ref, plus="0", minus=minus, output=net, figures=figures, sets=sets)
        for ref, minus, net, sets in (
            ("U1", "x1_s", "x1", "integrator x1"),
            ("U2", "x2_s", "out", "integrator x2"),
            ("U3", "x2_ns", "x2_n", "inverter of x2"),
        )
    )
    cells = tuple(
        Cell(
            kind=kind,
            block=block,
            amplifier=amplifier,
            inputs=tuple(inputs.split()),
            feedback=feedback,
            summing=summing,
            output=output,
            polarity=polarity,
        )
        for kind, block, amplifier, inputs, feedback, summing, output, polarity in (
            ("integrator", "x1", "U1", "R1 R2 R3", "C1", "x1_s", "x1", -1),
            ("integrator", "x2", "U2", "R4", "C2", "x2_s", "out", 1),
            ("inverter", "x2", "U3", "R5", "R6", "x2_ns", "x2_n", -1),
        )
    )
    return Circuit(passives=parts, amplifiers=amplifiers, cells=cells)


def graph() -> BlockGraph:
    """The same as a block graph."""
    first = (
        Term("in", W0, "input gain of x1"),
        Term("x1", -W0 / Q, "damping of x1"),
        Term("x2", -W0, "feedback from x2 into x1"),
    )
    second = (Term("x1", W0, "coupling from x1 into x2"),)
    blocks = (Block("x1", "integrator", first), Block("x2", "integrator", second))
    return BlockGraph("controllable", blocks, "x2")


def job(*, title: str = "Sensor low-pass, 1 kHz", accept: Accept | None = None) -> Job:
    """What was asked."""
    return Job(
        target=TransferFunction.from_factors(W0**2, (), (Factor.pair(W0, Q),)),
        signal=Signal(band_hz=BAND, input_peak=2.0, load=10e3),
        board=Board(
            op_amp=op_amp_class("general purpose"), resistors=RESISTORS, capacitors=CAPACITORS
        ),
        accept=accept or Accept(),
        title=title,
    )


def design(
    *,
    title: str = "Sensor low-pass, 1 kHz",
    accept: Accept | None = None,
    boards: int = 60,
    checks: tuple[Check, ...] = LIMITS,
    notices: tuple[str, ...] = (),
) -> Design:
    """A finished design of that board."""
    asked, made = job(title=title, accept=accept), circuit()
    program = compile_circuit(made)
    frequency = np.geomspace(*BAND, 121)
    target = asked.target.response(frequency)
    nominal = response_error(program.solve(frequency), target)
    noise = program.noise(frequency)
    return Design(
        job=asked,
        form="controllable",
        inverted=False,
        wanted=asked.target,
        graph=graph(),
        circuit=made,
        frequency_hz=frequency,
        nominal=nominal,
        nearest=replace(nominal, magnitude_db=5 * nominal.magnitude_db),
        tolerance=tolerance(made, asked, frequency, boards),
        certificate=Certificate(
            rms=2e-3,
            lower_bound=1.6e-3,
            proven=False,
            exhausted=False,
            assigned=("R2", "C1"),
            bottlenecks=(Bottleneck(refs=("R2", "C1"), rms=1.6e-3),),
        ),
        allowance=op_amp_allowance(made, made.with_values({"R4": 15.8e3}), target, frequency),
        budget=error_budget(program, made, nominal, frequency, accept=asked.accept, seed=1),
        noise=NoiseResult(
            frequency_hz=frequency,
            density=noise.density,
            output_rms=noise.rms(),
            shares=noise.shares(),
        ),
        swings=tuple(
            Swing(
                amplifier=a.ref,
                net=a.output,
                peak=2.1,
                peak_limit=10.5,
                peak_hz=700.0,
                slew=9e3,
                slew_limit=1e7,
                current=4e-4,
                current_limit=2e-2,
            )
            for a in made.amplifiers
        ),
        drifts=(Drift(amplifier="U2", net="out", rate=16.2),),
        candidates=(
            Candidate(
                form="controllable",
                possible=True,
                op_amps=3,
                spread_db=0.31,
                spread_deg=1.6,
                figures=figures(0.3),
                verdict="pass",
            ),
            Candidate(
                form="observable",
                possible=True,
                op_amps=4,
                spread_db=0.33,
                spread_deg=1.7,
                figures=figures(0.32),
                verdict="pass",
                reason="4 op-amps, controllable does it with 3",
            ),
            Candidate(
                form="cascade",
                possible=False,
                op_amps=None,
                spread_db=None,
                spread_deg=None,
                reason="no capacitor lets R land within 1 kohm to 1 Mohm",
            ),
        ),
        checks=checks,
        notices=notices,
    )


def figures(error_95_db: float, **changes: object) -> FormFigures:
    """What a form comes to, invented."""
    usual = FormFigures(
        resistors=6,
        capacitors=2,
        value_ratio=14.7,
        nominal=ErrorFigures(rms=2e-3, largest_db=0.03, largest_deg=0.2),
        boards=1000,
        passed=992,
        low=0.984,
        high=0.9965,
        error_95_db=error_95_db,
        noise_rms=2.1e-5,
        dynamic_range_db=104.0,
        peak=9.2,
        hottest="U2",
        gain_bandwidth_needed=3.1e5,
    )
    return replace(usual, **changes)  # type: ignore[arg-type]


def tolerance(made: Circuit, asked: Job, frequency: np.ndarray, boards: int) -> ToleranceResult:
    """Boards drawn uniformly; the counts are invented."""
    values = np.array([p.value for p in made.passives])
    relative = np.array([p.tolerance for p in made.passives])
    draws = np.random.default_rng(1).uniform(-1, 1, (boards, len(relative)))
    spread = response_error(
        compile_circuit(made).solve(frequency, values=values * (1 + draws * relative)),
        asked.target.response(frequency),
    )
    return ToleranceResult(
        boards=boards,
        passed=boards - 8,
        low=0.76,
        high=0.94,
        confidence=0.95,
        frequency_hz=frequency,
        magnitude_5=np.percentile(spread.magnitude_db, 5, axis=0),
        magnitude_95=np.percentile(spread.magnitude_db, 95, axis=0),
        phase_5=np.percentile(spread.phase_deg, 5, axis=0),
        phase_95=np.percentile(spread.phase_deg, 95, axis=0),
        error_95_db=0.7,
        seed=1,
    )


def verification(made: Design, *, failure: str | None = None) -> Verification:
    """What the simulator would say: the nodal response as if simulated, or a failure."""
    if failure is not None:
        return Verification(failure=failure)
    simulated = compile_circuit(made.circuit).solve(made.frequency_hz)
    target = made.wanted.response(made.frequency_hz)
    error = response_error(simulated, target)
    accept = made.job.accept
    time = np.linspace(0, 5e-3, 400)
    decay = np.exp(-W0 / (2 * Q) * time)
    return Verification(
        frequency_hz=made.frequency_hz,
        simulated=simulated,
        target=target,
        error=error,
        operating_point={"out": 0.0, "x1": 1e-9, "x2_n": 0.0},
        step=TransientResult(time, {"in": np.ones(400), "out": 1 - decay * np.cos(W0 * time)}),
        noise_rms=made.noise.output_rms,
        nodal_disagreement=3e-9,
        checks=(
            Check.at_most("magnitude error", error.largest_db, accept.magnitude_db, "dB"),
            Check.at_most("phase error", error.largest_deg, accept.phase_deg, "deg"),
        ),
    )


def drawings() -> Drawings:
    """Drawings with ids and a style sheet that would clash if they met on one page."""
    svg = (
        '<?xml version="1.0"?>\n<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 100 40">'
        '<style type="text/css">*{stroke-linejoin: round}</style><g id="patch_2">'
        '<path d="M 0 0 L 100 0 L 100 40 L 0 40 z" fill="#eee"/></g></svg>'
    )
    return Drawings(schematic=svg, blocks=svg, bode=svg)
