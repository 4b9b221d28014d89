"""The independent second opinion on a design, from ngspice.

The response, the operating point and the noise come from the linear deck, the step response
from the saturating one.  Two opinions on the same circuit, the nodal engine's and ngspice's,
are compared as well.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from netlist.clipping import SineRun, sine_check, sine_run
from netlist.comparison import compare
from netlist.deck import vendor_deck
from netlist.ngspice import Simulator, TransientResult
from netlist.stimulus import Decks, decks_of, settling_time, sweep_deck
from synth.circuit import GROUND
from synth.errors import SimulatorError
from synth.evidence import Check, ResponseError, response_error
from synth.grid import judged, points_per_decade, sweeps
from synth.nodal import compile_circuit
from synth.results import Design

__all__ = ["Verification", "disagreement", "settling", "verify"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

STEP_LIMIT_S = 20.0
"""Time for a step response [s]; a sound board of order 12 takes less than one."""

LARGEST_DISAGREEMENT = 1e-6
"""Of ngspice and the nodal engine, relative to |H|: more is a defect of one of them."""

LARGEST_MOVEMENT = 5.0
"""Of the largest swing [%]."""

AGREEMENT_ON_WORST = "difference on the worst boards"
"""Name of the check of both analyses on the boards of the run that come out worst."""

SMALLEST_COMPARED = 1e-6
"""Below this share of its largest value a response is compared absolutely."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Verification:
    """What ngspice says about a design.

    Parameters
    ----------
    frequency_hz, simulated, target
        Frequencies of the sweep [Hz], less any on a zero on the imaginary axis, response of
        the output, H there; shapes (F,).
    error
        Error of `simulated` against `target`.
    operating_point
        DC voltage of each net with the input at 0 V [V].
    step
        Voltages of the input, the output and every op-amp output after a step of the largest
        input.
    noise_rms
        Noise of the output over the band [V].
    sine
        The steady sine that every op-amp output was held against, None where there was none.
    vendor
        Response with the vendor's model of the op-amp against that with the one-pole model, where
        the job names a model and it could be simulated; no check rests on it.
    vendor_failure
        Why it could not be.
    nodal_disagreement
        Of ngspice and the nodal engine on the same circuit, see `disagreement`.
    worst_disagreement
        The largest on the worst boards of the tolerance run; None where none were kept.
    checks
        ``magnitude error`` and ``phase error``, the difference of the two analyses on the
        nominal board and on the worst ones, then ``settling after a step`` where the target
        settles and ``clipping of the largest sine`` where the predicted peaks do not clip; empty
        without a response.
    failure
        Why the simulator did not deliver, or None.  What it did not deliver is None above; a
        response may be there although a later analysis failed.
    """

    frequency_hz: Real | None = None
    simulated: Complex | None = None
    target: Complex | None = None
    error: ResponseError | None = None
    operating_point: dict[str, float] | None = None
    step: TransientResult | None = None
    noise_rms: float | None = None
    sine: SineRun | None = None
    vendor: ResponseError | None = None
    vendor_failure: str | None = None
    nodal_disagreement: float | None = None
    worst_disagreement: float | None = None
    checks: tuple[Check, ...] = ()
    failure: str | None = None

    def __post_init__(self) -> None:
        if self.failure is None and not self.checks:
            raise ValueError("got neither checks nor a failure, expected one of them")


def verify(design: Design, *, simulator: Simulator | None = None) -> Verification:
    """Simulate a design and compare it with its target.

    Without `simulator` one is started and ended.  A simulator that is missing or fails ends
    in a `Verification` with a `failure`, not in an error.
    """
    decks = decks_of(design)
    if simulator is not None:
        return _verify(design, decks, simulator)
    try:
        with Simulator() as own:
            return _verify(design, decks, own)
    except SimulatorError as problem:
        return Verification(failure=str(problem))


def disagreement(one: Complex, other: Complex) -> float:
    """Largest difference of two responses relative to `other`, shapes (F,).

    Where `other` is below one millionth of its largest value, relative to that instead.
    """
    size = np.abs(other)
    floor = np.maximum(size, SMALLEST_COMPARED * np.max(size))
    return float(np.max(np.abs(one - other) / np.maximum(floor, np.finfo(float).tiny)))


def settling(design: Design, step: TransientResult) -> tuple[Check, ...]:
    """Whether every op-amp output is at rest at the end of the step response.

    A response over frequency shows nothing of an op-amp that oscillates; the saturating models
    do.  The check is the largest peak-to-peak voltage over the last tenth of the run, a share
    of the largest swing.  There is none where the target itself does not settle in the run.
    """
    settled = settling_time(design.wanted)
    if settled is None or settled > 1.05 * step.time_s[-1]:
        return ()
    late = step.time_s >= 0.9 * step.time_s[-1]
    moved = {net: float(np.ptp(step.voltages[net][late])) for net in design.circuit.signal_nets()}
    net = max(moved, key=lambda name: moved[name], default=None)
    if net is None:
        return ()
    share = 100 * moved[net] / design.job.board.swing_limit
    return (
        Check.at_most(
            "settling after a step", share, LARGEST_MOVEMENT, "%", f"of the swing, at {net}"
        ),
    )


def _verify(design: Design, decks: Decks, simulator: Simulator) -> Verification:
    """Run the analyses, the response first; the first that fails ends the work."""
    circuit = design.circuit
    band = design.job.signal.band_hz
    out = circuit.output_net
    nets = sorted(net for net in circuit.connections if net != GROUND)
    watched = list(dict.fromkeys([circuit.input_net, *circuit.signal_nets(), out]))
    density = points_per_decade(design.wanted, band_hz=band)
    so_far = Verification(failure="nothing was simulated")
    try:
        response = simulator.ac(decks.board, [out])
        so_far = _compared(design, response.frequency_hz, response.voltages[out])
        so_far = _worst_compared(design, decks, simulator, so_far, response.frequency_hz)
        so_far = replace(so_far, operating_point=simulator.operating_point(decks.board, nets))
        noise = simulator.noise(decks.board, out, *band, density)
        so_far = replace(so_far, noise_rms=noise.total_rms)
        step = simulator.transient(decks.step, watched, time_limit=STEP_LIMIT_S)
        so_far = replace(so_far, step=step, checks=(*so_far.checks, *settling(design, step)))
        so_far = _with_sine(design, simulator, so_far)
        return _with_vendor(design, simulator, so_far)
    except SimulatorError as problem:
        return replace(so_far, failure=str(problem))


def _compared(design: Design, frequency_hz: Real, simulated: Complex) -> Verification:
    keep = judged(design.wanted, frequency_hz)
    frequency_hz, simulated = frequency_hz[keep], simulated[keep]
    target = design.wanted.response(frequency_hz)
    nodal = compile_circuit(design.circuit).solve(frequency_hz)
    differing = disagreement(simulated, nodal)
    agreement = _agreement(
        "difference of the two analyses", differing, "ngspice against the nodal engine"
    )
    return Verification(
        frequency_hz=frequency_hz,
        simulated=simulated,
        target=target,
        error=response_error(simulated, target),
        nodal_disagreement=differing,
        checks=(*compare(frequency_hz, simulated, target, design.job.accept), agreement),
    )


def _worst_compared(
    design: Design, decks: Decks, simulator: Simulator, so_far: Verification, swept_hz: Real
) -> Verification:
    """The worst boards of the run in ngspice."""
    circuit, worst = design.circuit, design.tolerance.worst
    if not worst:
        return so_far
    found = _worst_responses(design, decks, simulator)
    keep = judged(design.wanted, swept_hz)
    gain_bandwidth = [b.gain_bandwidth for b in worst if b.gain_bandwidth is not None]
    nodal = compile_circuit(circuit).solve(
        swept_hz[keep],
        values=[b.values for b in worst],
        gain_bandwidth=gain_bandwidth or None,
    )
    differing = [disagreement(one[keep], other) for one, other in zip(found, nodal, strict=True)]
    place = int(np.argmax(differing))
    largest, which = differing[place], worst[place]
    note = (
        f"ngspice against the nodal engine, {len(worst)} of {design.tolerance.boards} boards; "
        f"largest on number {which.number + 1}"
    )
    check = _agreement(AGREEMENT_ON_WORST, largest, note)
    return replace(so_far, worst_disagreement=largest, checks=(*so_far.checks, check))


def _worst_responses(design: Design, decks: Decks, simulator: Simulator) -> list[Complex]:
    """The response of each: the same deck with its values; where op-amps spread too, whose figures
    no deck can alter, a deck of its own."""
    circuit, worst = design.circuit, design.tolerance.worst
    refs = [p.ref for p in circuit.passives]
    drawn = [dict(zip(refs, board.values, strict=True)) for board in worst]
    if all(board.gain_bandwidth is None for board in worst):
        return list(simulator.alter_ac(decks.board, drawn, circuit.output_net))
    found = []
    for board, values in zip(worst, drawn, strict=True):
        amplifiers = tuple(
            replace(amp, figures=replace(amp.figures, gain_bandwidth=figure))
            for amp, figure in zip(circuit.amplifiers, board.gain_bandwidth or (), strict=True)
        )
        made = replace(circuit.with_values(values), amplifiers=amplifiers)
        swept = simulator.ac(sweep_deck(design, made), [circuit.output_net])
        found.append(swept.voltages[circuit.output_net])
    return found


def _with_sine(design: Design, simulator: Simulator, so_far: Verification) -> Verification:
    """A sine at the hottest output's peak, where every output is predicted to be in its limits."""
    run = sine_run(design)
    if run is None:
        return so_far
    found = simulator.transient(run.deck, list(run.expected), time_limit=STEP_LIMIT_S)
    return replace(so_far, sine=run, checks=(*so_far.checks, sine_check(run, found)))


def _with_vendor(design: Design, simulator: Simulator, so_far: Verification) -> Verification:
    """The response with the vendor's model; a model that fails is told, and no more."""
    model = design.job.board.vendor_model
    if model is None or so_far.simulated is None:
        return so_far
    whole, *further = sweeps(design.wanted, design.job.signal.band_hz)
    deck = vendor_deck(
        design.circuit,
        model,
        title=design.job.title,
        supply=design.job.board.supply,
        start_hz=whole.start_hz,
        stop_hz=whole.stop_hz,
        points_per_decade=whole.points_per_decade,
        further=further,
    )
    out = design.circuit.output_net
    try:
        found = simulator.ac(deck, [out])
    except SimulatorError as problem:
        return replace(so_far, vendor_failure=str(problem))
    response = found.voltages[out][judged(design.wanted, found.frequency_hz)]
    if not np.all(np.isfinite(response)):
        return replace(so_far, vendor_failure="the response is not a number everywhere")
    return replace(so_far, vendor=response_error(response, so_far.simulated))


def _agreement(name: str, differing: float, note: str) -> Check:
    return Check.at_most(name, 1e6 * differing, 1e6 * LARGEST_DISAGREEMENT, "ppm", note)
