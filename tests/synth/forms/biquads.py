"""Second-order sections as circuits with equal parts, and where their poles then lie."""

from __future__ import annotations

import math

import numpy as np

from synth.circuit import Circuit
from synth.forms import realize
from synth.mapping import Sizing, map_graph
from synth.nodal import compile_circuit
from synth.polarity import choose_polarity
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for

F0 = 1e3
W0 = 2 * math.pi * F0


def low_pass(q: float) -> TransferFunction:
    """A low-pass of unit gain at 1 kHz."""
    pair = Factor.pair(W0, q)
    return TransferFunction.from_factors(pair.coefficients[-1], [], [pair])


def unscaled(
    target: TransferFunction, form: str, *, gain_bandwidth: float, capacitor: float = 10e-9
) -> Circuit:
    """The circuit of a form with every signal at its level in the graph: equal capacitors, and so
    equal resistors where the rates are equal; op-amps of A(s) = wt/s."""
    job = job_for(
        target,
        (100.0, 2e3),
        op_amp_figures={"gain_bandwidth": gain_bandwidth, "open_loop_gain": 1e12},
    )
    graph = realize(target, form)
    r = 1 / (W0 * capacitor)
    sizing = Sizing(
        capacitors={b.name: capacitor for b in graph.integrators},
        feedback={b.name: r for b in graph.adders},
        inverters=r,
    )
    return map_graph(graph, choose_polarity(graph, inverted="either"), sizing, job)


def frequency_and_q(circuit: Circuit) -> tuple[float, float]:
    """w0 over that of `low_pass`, and Q, of the pole pair near it: those of the rational function
    of second order nearest to the response within a tenth of it.

    What op-amps add far above is taken up by the numerator.
    """
    p = 1j * np.linspace(0.9, 1.1, 41)
    response = compile_circuit(circuit).solve(p.imag * F0)
    # response (p^2 + a1 p + a0) = n0 + n1 p + n2 p^2, linear in the five coefficients.
    left = np.stack([response * p, response, -np.ones_like(p), -p, -p * p], axis=1)
    right = -response * p * p
    found, *_ = np.linalg.lstsq(
        np.concatenate([left.real, left.imag]), np.concatenate([right.real, right.imag]), rcond=None
    )
    a1, a0 = found[:2]
    return math.sqrt(a0), math.sqrt(a0) / a1
