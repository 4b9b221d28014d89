"""What the op-amps must do: swing, slew, output current, and the drift of bare integrators.

Computed on the circuit as it will be built, with its chosen values and its op-amps.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from synth.circuit import GROUND, Amplifier, Circuit
from synth.evidence import Check
from synth.job import Job
from synth.nodal import NodalProgram, compile_circuit
from synth.peaks import frequencies_of_interest, frequencies_within
from synth.readback import block_names, graph_of
from synth.results import Drift, Swing
from synth.transfer import TransferFunction

__all__ = ["drifts", "swing_checks", "swings"]

Real = NDArray[np.float64]

# Outputs this close (a ratio) to their peak count as being at it.
FLAT = 1e-6

# Gain of an op-amp whose output is held at 0 V: what it passes on is out of sight.
GAIN_HELD = 1e-9


def swings(circuit: Circuit, target: TransferFunction, job: Job) -> tuple[Swing, ...]:
    """Peak, rate and current of every op-amp output at the stated input.

    The peak is the Linf norm over all frequencies (from the lower edge of the band upward
    with a pole at the origin) times the input, or with ``swing = "any"`` the L1 norm times
    the input.  Rate and current are those of sines within the band.
    """
    signal = job.signal
    from_hz = signal.band_hz[0] if target.poles_at_origin else None
    everywhere = frequencies_of_interest(target, from_hz=from_hz)
    if from_hz is None:
        everywhere = np.concatenate([[0.0], everywhere])
    within = frequencies_within(signal.band_hz, target)
    outputs = [a.output for a in circuit.amplifiers]
    program = compile_circuit(circuit)
    volts = signal.input_peak * np.abs(program.solve(everywhere, nets=outputs))
    in_band = signal.input_peak * np.abs(program.solve(within, nets=outputs))
    bounds = _any_input_peaks(circuit, signal.input_peak) if signal.swing == "any" else None
    out: list[Swing] = []
    for k, amplifier in enumerate(circuit.amplifiers):
        # The lowest frequency that has the peak: DC where the response is flat from there.
        place = int(np.argmax(volts[:, k] >= np.max(volts[:, k]) * (1 - FLAT)))
        amperes = signal.input_peak * _output_currents(program, amplifier, within)
        out.append(
            Swing(
                amplifier=amplifier.ref,
                net=amplifier.output,
                peak=bounds[amplifier.output] if bounds else float(volts[place, k]),
                peak_limit=job.board.swing_limit,
                peak_hz=None if bounds else float(everywhere[place]),
                slew=float(np.max(2 * np.pi * within * in_band[:, k])),
                slew_limit=amplifier.figures.slew_rate,
                current=float(np.max(amperes)),
                current_limit=amplifier.figures.output_current,
            )
        )
    return tuple(out)


def _any_input_peaks(circuit: Circuit, input_peak: float) -> dict[str, float]:
    """Bound on every op-amp output for any input up to the peak, by net [V]: infinite where the
    board is not stable by itself."""
    nets = [a.output for a in circuit.amplifiers]
    system = compile_circuit(circuit).state_space(nets)
    norms = system.l1_norms() if system.is_stable else np.full(len(nets), np.inf)
    return {net: input_peak * float(v) for net, v in zip(nets, norms, strict=True)}


def _output_currents(program: NodalProgram, amplifier: Amplifier, frequency_hz: Real) -> Real:
    """Current of the parts on an op-amp output per volt at the input [A/V], shape (F,)."""
    circuit = program.circuit
    on_net = [p for p in circuit.passives if amplifier.output in p.nets]
    far = [p.nets[1] if p.nets[0] == amplifier.output else p.nets[0] for p in on_net]
    nets = [amplifier.output, *(net for net in dict.fromkeys(far) if net != GROUND)]
    volts = dict(zip(nets, np.moveaxis(program.solve(frequency_hz, nets=nets), -1, 0), strict=True))
    total = np.zeros(frequency_hz.size, dtype=np.complex128)
    for part, net in zip(on_net, far, strict=True):
        across = volts[amplifier.output] - (0.0 if net == GROUND else volts[net])
        resistor = part.kind == "resistor"
        total += across * (1 / part.value if resistor else 2j * np.pi * frequency_hz * part.value)
    return np.abs(total)


def swing_checks(found: tuple[Swing, ...], names: dict[str, str]) -> tuple[Check, ...]:
    """The lines of the verdict: peak, slew rate and output current of every op-amp.

    `names` gives the words for each op-amp.
    """
    checks: list[Check] = []
    for swing in found:
        where = f"{swing.amplifier} ({names[swing.amplifier]})"
        at = "any input" if swing.peak_hz is None else f"at {swing.peak_hz:.4g} Hz"
        at = "at DC" if swing.peak_hz == 0 else at
        checks.append(Check.at_most(f"peak of {where}", swing.peak, swing.peak_limit, "V", at))
    for swing in found:
        where = f"{swing.amplifier} ({names[swing.amplifier]})"
        checks.append(
            Check.at_most(f"slew of {where}", swing.slew / 1e6, swing.slew_limit / 1e6, "V/us")
        )
    for swing in found:
        where = f"{swing.amplifier} ({names[swing.amplifier]})"
        checks.append(
            Check.at_most(
                f"current of {where}", swing.current * 1e3, swing.current_limit * 1e3, "mA"
            )
        )
    return tuple(checks)


def drifts(circuit: Circuit) -> tuple[Drift, ...]:
    """Integrators with no feedback at DC, and how fast offset and bias make them drift.

    An integrator has DC feedback when its output finds a way back to its input through other
    cells.  Offsets and bias currents of all op-amps act: its own, and those of the cells that
    feed it, each with its sign along all paths, and then all of the worst sign.  Their sum is the
    current into the capacitor: with the output held at 0 V by an op-amp of the gain g -> 0, the
    output is g times what stands between the inputs, so that the rate is (output / g) sum(1/R) / C
    with R the input resistors.  All bare integrators are held so, and none of them feeds another.
    """
    graph = graph_of(circuit)
    names = block_names(circuit)
    reads = {b.name: {t.source for t in b.terms} for b in graph.blocks}
    behind = {name: _sources_of(name, reads) for name in reads}
    bare = [
        cell
        for cell in circuit.cells
        if cell.kind == "integrator" and names[cell.output] not in behind[names[cell.output]]
    ]
    if not bare:
        return ()
    held = {cell.amplifier for cell in bare}
    offsets = compile_circuit(_held(circuit, held)).dc_offsets()
    volts = dict(zip(offsets.nets, offsets.worst / GAIN_HELD, strict=True))
    out: list[Drift] = []
    for cell in bare:
        capacitance = circuit.by_ref[cell.feedback].value
        conductance = sum(1 / circuit.branch(cell, r).resistance for r in cell.inputs)
        before = behind[names[cell.output]]
        out.append(
            Drift(
                amplifier=cell.amplifier,
                net=cell.output,
                rate=float(volts[cell.output]) * conductance / capacitance,
                behind=tuple(c.amplifier for c in bare if names[c.output] in before),
            )
        )
    return tuple(out)


def _held(circuit: Circuit, held: Collection[str]) -> Circuit:
    """The circuit with the op-amps `held`, by reference, of a gain that is as good as none."""
    return replace(
        circuit,
        amplifiers=tuple(
            replace(a, figures=replace(a.figures, open_loop_gain=GAIN_HELD)) if a.ref in held else a
            for a in circuit.amplifiers
        ),
    )


def _sources_of(name: str, reads: dict[str, set[str]]) -> set[str]:
    """Every block or input whose signal reaches the inputs of block `name`."""
    seen: set[str] = set()
    waiting = set(reads[name])
    while waiting:
        source = waiting.pop()
        if source not in seen:
            seen.add(source)
            waiting |= reads.get(source, set())
    return seen
