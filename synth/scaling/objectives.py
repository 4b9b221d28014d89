"""What a scaling is judged by: response error with real op-amps, noise, output current.

With the one-pole gain A(s) = A0 / (1 + s A0/wt), a cell with noise gain N multiplies its
signal by 1 / (1 + N / A), to first order 1 - N / A; N = 1 + sum |w| / s for an integrator,
1 + sum |k| for an adder, 2 for an inverter, and what `synth.scaling.crowding` says for a cell that
uses both inputs.  The error of ln H is the sum of these, each times
the sensitivity of ln H to the signal of its block, which no scaling changes; so it is a sum of
exponentials in the logarithms of the levels.  The noise powers of op-amps and resistors at
the output are too.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.constants import BOLTZMANN, TEMPERATURE
from synth.graph import BlockGraph
from synth.parts import OpAmp
from synth.peaks import SignalPeaks
from synth.polarity import Polarity
from synth.scaling.crowding import NoiseGains
from synth.scaling.signomial import Signomial
from synth.scaling.variables import Variables

__all__ = ["current_shares", "noise_power", "response_error_power"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def inverse_gain(op_amp: OpAmp, s: Complex) -> Complex:
    """1 / A(s) = 1 / A0 + s / (2 pi GBW)."""
    return 1 / op_amp.open_loop_gain + s / (2 * np.pi * op_amp.gain_bandwidth)


def response_error_power(
    variables: Variables,
    polarity: Polarity,
    op_amp: OpAmp,
    frequency_hz: Real,
    *,
    crowded: frozenset[str] = frozenset(),
) -> Signomial:
    """Mean over `frequency_hz` of |error of ln H|^2, first order in 1/A.

    `crowded` are the cells whose noise gain is that of their non-inverting input.
    """
    graph, gains = variables.graph, NoiseGains(polarity=polarity, crowded=crowded)
    s = np.asarray(2j * np.pi * frequency_hz, dtype=np.complex128)
    signals, injections = graph.signals(s), graph.injections(s)
    output = signals[graph.output]
    inverse = inverse_gain(op_amp, s)
    fixed = np.zeros(s.size, dtype=complex)
    parts: list[tuple[Complex, Real]] = []
    for block in graph.blocks:
        sensitivity = injections[block.name] * signals[block.name] / output
        one, terms = gains.of(block)
        fixed -= one * inverse * sensitivity
        for term in terms:
            weight, exponents = variables.weight(block, term)
            shape = weight / s if block.is_integrator else np.full(s.size, weight + 0j)
            parts.append((-inverse * sensitivity * shape, exponents))
    fixed -= 2 * inverse * _inverter_sensitivity(graph, polarity, signals, injections, s)
    parts.append((fixed, np.zeros(variables.count)))
    columns = np.array([c for c, _ in parts])
    exponents = np.array([e for _, e in parts])
    gram = (columns.conj() @ columns.T).real / s.size
    pairs = exponents[:, None, :] + exponents[None, :, :]
    return Signomial(gram.ravel(), pairs.reshape(-1, variables.count))


def _inverter_sensitivity(
    graph: BlockGraph,
    polarity: Polarity,
    signals: dict[str, Complex],
    injections: dict[str, Complex],
    s: Complex,
) -> Complex:
    """Sum over the inverters of the sensitivity of ln H to their gain."""
    output = signals[graph.output]
    total = np.zeros(s.size, dtype=complex)
    for block in graph.blocks:
        into = injections[block.name] / (s if block.is_integrator else 1.0)
        for term in block.terms:
            if not polarity.direct(block.name, term.source, float(term.weight)):
                source = signals.get(term.source, np.ones(s.size, dtype=complex))
                total = total + into * float(term.weight) * source / output
    if polarity.output_from_inverter:
        total = total + 1.0
    return total


def noise_power(
    variables: Variables, polarity: Polarity, op_amp: OpAmp, frequency_hz: Real
) -> Signomial:
    """Noise power at the output over the band [V^2], from op-amp voltage noise and resistors.

    The noise of inverters, which no scaling changes, is left out.  The resistors at each input of
    a cell that uses both make as much noise as those at the other.
    """
    graph, noise_gains = variables.graph, NoiseGains(polarity=polarity)
    omega = 2 * np.pi * frequency_hz
    injections = graph.injections(1j * omega)
    en2, four_kt = op_amp.voltage_noise**2, 4 * BOLTZMANN * TEMPERATURE
    terms: list[tuple[float, Real]] = []
    for block in graph.blocks:
        square = np.abs(injections[block.name]) ** 2
        down = variables.level(block.name, -2.0)
        plain = float(np.trapezoid(square, frequency_hz))
        inputs = [variables.weight(block, t) for t in noise_gains.of(block)[1]]
        if block.is_integrator:
            slope = float(np.trapezoid(square / omega**2, frequency_hz))
            terms.append((plain * en2, down))
            per_c = variables.size(block.name, -1.0)
            terms += [(four_kt * slope * w, down + e + per_c) for w, e in inputs]
            terms += [
                (en2 * slope * w1 * w2, down + e1 + e2) for w1, e1 in inputs for w2, e2 in inputs
            ]
        else:
            gains = [(1.0, np.zeros(variables.count)), *inputs]
            own = variables.size(block.name)
            sides = 2 if noise_gains.uses_both_inputs(block) else 1
            terms += [(sides * four_kt * plain * k, down + e + own) for k, e in gains]
            terms += [
                (en2 * plain * k1 * k2, down + e1 + e2) for k1, e1 in gains for k2, e2 in gains
            ]
    return Signomial.of_terms(terms, variables.count)


def current_shares(
    variables: Variables,
    peaks: SignalPeaks,
    op_amp: OpAmp,
    *,
    input_peak: float,
    load: float | None,
) -> list[Signomial]:
    """Peak output current of each block over the op-amp's limit, an upper bound where all of its
    readers have virtual grounds.

    The peak over every resistor that reads the block, its own feedback, and the load.
    """
    graph = variables.graph
    out: list[Signomial] = []
    for block in graph.blocks:
        volts = input_peak * peaks.peak[block.name] / op_amp.output_current
        level = variables.level(block.name)
        terms: list[tuple[float, Real]] = []
        for reader, term in graph.readers(block.name):
            r, exponents = variables.resistance(reader, term)
            terms.append((volts / r, level - exponents))
        if block.is_integrator:
            rate = input_peak * peaks.rate[block.name] / op_amp.output_current
            terms.append((rate, level + variables.size(block.name)))
        else:
            terms.append((volts, level - variables.size(block.name)))
        if block.name == graph.output and load is not None:
            terms.append((volts / load, level))
        out.append(Signomial.of_terms(terms, variables.count))
    return out
